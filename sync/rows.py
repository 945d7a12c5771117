"""One row of the record: how it is kept, read back, and joined with its private part."""

import hashlib
import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sync.encoding import unb64
from sync.entry import Entry, Realm, digest, private_part
from sync.errors import NotKept
from sync.shelf import is_name

ROW = "log, seq, hash, body, sig"
Row = tuple[str, int, bytes, bytes, bytes]


@dataclass(frozen=True, slots=True)
class Head:
    """A place in a log and the hash there, which says everything about what is before it."""

    seq: int
    hash: bytes


def keep_private(db: sqlite3.Connection, entry: Entry) -> None:
    """Keep the private part that came with a verified entry, if it is not held."""
    if entry.private is not None:
        h = hashlib.sha256(entry.private).digest()
        if db.execute("SELECT 1 FROM private WHERE h = ?", (h,)).fetchone() is None:
            db.execute("INSERT INTO private VALUES (?, ?)", (h, entry.private))


def with_private(db: sqlite3.Connection, entry: Entry) -> Entry:
    """Return the entry with its private part attached, if that is held."""
    if b'"priv":' not in entry.body:  # spares parsing of the many that have none
        return entry
    label = private_part(entry.fields())
    if label is None:
        return entry
    try:
        h = unb64(label["h"])
    except (KeyError, ValueError):
        return entry
    row = db.execute("SELECT p FROM private WHERE h = ?", (h,)).fetchone()
    private = None if row is None else bytes(row[0])
    return Entry(entry.log, entry.seq, entry.hash, entry.body, entry.sig, private)


def entry_of(row: Row) -> Entry:
    log, seq, hash_, body, sig = row
    return Entry(log, seq, bytes(hash_), bytes(body), bytes(sig))


def index_scopes(db: sqlite3.Connection, entry: Entry, scopes: Sequence[str]) -> None:
    # ON CONFLICT, not OR IGNORE: only the very same row may be there already.
    db.executemany(
        "INSERT INTO entry_scope VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING",
        [(scope, entry.log, entry.seq, entry.hash) for scope in scopes],
    )


def index_blobs(db: sqlite3.Connection, entry: Entry, fields: Mapping[str, Any]) -> None:
    """Note which blobs an entry names; what has not the shape of a blob is passed over."""
    named = fields.get("blobs")
    for one in named if isinstance(named, list) else []:
        if not isinstance(one, Mapping) or not is_name(one.get("h")):
            continue
        size, media = one.get("n"), one.get("t")
        if type(size) is int and 0 < size < 2**53 and isinstance(media, str):
            db.execute(
                "INSERT INTO blob (h, hash, log, seq, n, t) VALUES (?, ?, ?, ?, ?, ?) "
                "ON CONFLICT DO NOTHING",
                (one["h"], entry.hash, entry.log, entry.seq, size, media),
            )


def read_back(db: sqlite3.Connection, table: str, entry: Entry, realm: Realm | None) -> None:
    row = db.execute(
        f"SELECT {ROW} FROM {table} WHERE log = ? AND seq = ? AND hash = ?",
        (entry.log, entry.seq, entry.hash),
    ).fetchone()
    kept = None if row is None else entry_of(row)
    wanted = Entry(entry.log, entry.seq, entry.hash, entry.body, entry.sig)
    if kept != wanted or (realm is not None and digest(realm, kept.body) != kept.hash):
        raise NotKept(entry.log, entry.seq)


def find(db: sqlite3.Connection, hash: bytes) -> Entry | None:
    """Return the entry of this hash: from whole logs, else borrowed, else of a branch."""
    for table in ("entry", "borrowed", "branch"):
        row = db.execute(f"SELECT {ROW} FROM {table} WHERE hash = ? LIMIT 1", (hash,)).fetchone()
        if row is not None:
            return with_private(db, entry_of(row))
    return None


def holds(db: sqlite3.Connection, hash: bytes) -> bool:
    """Say whether page tables follow this entry already.

    The losing side of a fork is kept as evidence only, so holding it there does not count.
    """
    row = db.execute(
        "SELECT 1 FROM entry WHERE hash = :h UNION ALL SELECT 1 FROM borrowed WHERE hash = :h "
        "UNION ALL SELECT 1 FROM branch WHERE hash = :h AND stated > 0 LIMIT 1",
        {"h": hash},
    ).fetchone()
    return row is not None
