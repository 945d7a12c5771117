"""The record in SQLite: append, read, heads, scopes. The caller opens and ends transactions."""

import sqlite3
from dataclasses import dataclass

from sync.encoding import b64
from sync.entry import Entry, Realm, scopes_of
from sync.errors import Fork, Gap
from sync.rows import (
    ROW,
    Head,
    entry_of,
    find,
    holds,
    index_blobs,
    index_scopes,
    keep_private,
    read_back,
    with_private,
)
from sync.shares import (
    acknowledged,
    borrow,
    borrowed_of,
    carried_by,
    cursors,
    drop_acknowledgement,
    drop_scope,
    gist,
    keep_acknowledgement,
    note_carriage,
    scoped,
)
from sync.tables import make_tables, prepare

__all__ = [
    "Head",
    "acknowledged",
    "add",
    "add_branch",
    "borrow",
    "borrowed_of",
    "carried_by",
    "cursors",
    "drop_acknowledgement",
    "drop_scope",
    "find",
    "gist",
    "hash_at",
    "head",
    "heads",
    "holds",
    "keep_acknowledgement",
    "keep_private",
    "last_stated",
    "logs",
    "make_tables",
    "next_stated",
    "note_carriage",
    "prepare",
    "read",
    "received",
    "scoped",
    "with_private",
]

MOST_BYTES = 1 << 20
NO_ENTRY = b""


@dataclass(frozen=True, slots=True)
class _Stretch:
    """A run of one log's stated history and the table rows that hold it."""

    stated: int  # 0: table entry; n: branch rows with this mark
    first: int
    before: int | None


def logs(db: sqlite3.Connection) -> list[str]:
    """Return the logs held whole, sorted, without walking through their entries."""
    rows = db.execute(
        "WITH RECURSIVE step(log) AS (SELECT MIN(log) FROM entry UNION ALL "
        "SELECT (SELECT MIN(log) FROM entry WHERE log > step.log) FROM step "
        "WHERE step.log IS NOT NULL) SELECT log FROM step WHERE log IS NOT NULL"
    )
    return [log for (log,) in rows]


def head(db: sqlite3.Connection, log: str) -> Head | None:
    """Return the last place of the history that is stated for this log, or None."""
    for stretch in reversed(_stretches(db, log)):
        row = db.execute(
            f"SELECT seq, hash FROM {_table(stretch)} AND seq >= ? "
            "AND (? IS NULL OR seq < ?) ORDER BY seq DESC LIMIT 1",
            (log, stretch.first, stretch.before, stretch.before),
        ).fetchone()
        if row is not None:
            return Head(row[0], row[1])
    return None


def heads(db: sqlite3.Connection) -> dict[str, Head]:
    """Return the stated head of every log held whole."""
    found = {log: head(db, log) for log in logs(db)}
    return {log: place for log, place in found.items() if place is not None}


def hash_at(db: sqlite3.Connection, log: str, seq: int) -> bytes | None:
    """Return the hash at one place of the stated history, or None where it does not reach."""
    for stretch in reversed(_stretches(db, log)):
        if seq >= stretch.first:
            row = db.execute(
                f"SELECT hash FROM {_table(stretch)} AND seq = ?", (log, seq)
            ).fetchone()
            return None if row is None else bytes(row[0])
    return None


def read(
    db: sqlite3.Connection, log: str, first: int, most: int, most_bytes: int = MOST_BYTES
) -> list[Entry]:
    """Return the stated history from ``first`` on, at most so many entries and bytes.

    At least one entry comes if there is one. Private parts are attached where held.
    """
    found: list[Entry] = []
    size = 0
    for stretch in _stretches(db, log):
        rows = db.execute(
            f"SELECT {ROW} FROM {_table(stretch)} AND seq >= ? AND (? IS NULL OR seq < ?) "
            "ORDER BY seq LIMIT ?",
            (log, max(first, stretch.first), stretch.before, stretch.before, most - len(found)),
        )
        for row in rows:
            entry = with_private(db, entry_of(row))
            size += len(entry.body) + len(entry.private or b"")
            if found and size > most_bytes:
                return found
            found.append(entry)
    return found


def received(db: sqlite3.Connection, hash: bytes) -> bool:
    """Say whether central has acknowledged an own entry, itself or in the entry that carried it.

    A place below the acknowledged one is not enough: it must be of the history acknowledged.
    """
    seen: set[bytes] = set()
    name: bytes | None = hash
    while name is not None and name not in seen:
        seen.add(name)
        row = db.execute("SELECT log, seq FROM entry WHERE hash = ?", (name,)).fetchone()
        noted = None if row is None else acknowledged(db, row[0])
        if noted is not None and row[1] <= noted.seq and hash_at(db, row[0], row[1]) == name:
            return True
        name = carried_by(db, name)
    return False


def add(
    db: sqlite3.Connection, entry: Entry, *, at: str, frm: str, realm: Realm | None = None
) -> None:
    """Append a verified entry to its log, then read it back and compare before the commit.

    ``at`` and ``frm`` say when and from whom it came; with ``realm`` it is hashed again too.

    Raises:
        Gap: Its forerunner is missing.
        Fork: The place is taken, or its ``prev`` is not the entry before it.
        NotKept: The row read back is not the row written.
    """
    fields = entry.fields()
    row = db.execute(
        "SELECT seq, hash FROM entry WHERE log = ? ORDER BY seq DESC LIMIT 1", (entry.log,)
    ).fetchone()
    last, last_hash = (0, NO_ENTRY) if row is None else (row[0], bytes(row[1]))
    if entry.seq > last + 1:
        raise Gap(entry.log, last + 1, entry.seq)
    if entry.seq <= last or fields.get("prev") != b64(last_hash):
        raise Fork(entry.log, entry.seq)
    db.execute(
        "INSERT INTO entry VALUES (?, ?, ?, ?, ?, ?, ?)",
        (entry.log, entry.seq, entry.hash, entry.body, entry.sig, at, frm),
    )
    read_back(db, "entry", entry, realm)
    db.execute("DELETE FROM borrowed WHERE hash = ?", (entry.hash,))
    keep_private(db, entry)
    index_scopes(db, entry, scopes_of(fields))
    index_blobs(db, entry, fields)


def add_branch(
    db: sqlite3.Connection,
    entry: Entry,
    *,
    stated: int = 0,
    at: str,
    frm: str,
    realm: Realm | None = None,
) -> bool:
    """Keep one entry of the other side of a fork; say whether it was new under this mark.

    ``stated`` 0 keeps it as evidence; else heads are stated by it from its place on.
    """
    known = db.execute(
        "SELECT 1 FROM branch WHERE log = ? AND stated = ? AND seq = ? AND hash = ?",
        (entry.log, stated, entry.seq, entry.hash),
    ).fetchone()
    if known is not None:
        return False
    db.execute(
        "INSERT INTO branch VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        (entry.log, entry.seq, entry.hash, entry.body, entry.sig, at, frm, stated),
    )
    read_back(db, "branch", entry, realm)
    keep_private(db, entry)
    index_blobs(db, entry, entry.fields())
    return True


def next_stated(db: sqlite3.Connection, log: str) -> int:
    """Return the mark for a newly learned history of this log."""
    row = db.execute("SELECT COALESCE(MAX(stated), 0) FROM branch WHERE log = ?", (log,))
    return int(row.fetchone()[0]) + 1


def last_stated(db: sqlite3.Connection, log: str) -> int:
    """Return the mark of the history that heads are stated by; 0 is the log's own."""
    stretches = _stretches(db, log)
    return stretches[-1].stated if stretches else 0


def _stretches(db: sqlite3.Connection, log: str) -> list[_Stretch]:
    # The newest named history counts from its first place on; below that the one before it.
    marks = db.execute(
        "SELECT stated, MIN(seq) FROM branch WHERE log = ? AND stated > 0 "
        "GROUP BY stated ORDER BY stated DESC",
        (log,),
    ).fetchall()
    found: list[_Stretch] = []
    before: int | None = None
    for stated, first in [*marks, (0, 1)]:
        if before is None or first < before:
            found.append(_Stretch(stated, first, before))
            before = first
    return found[::-1]


def _table(stretch: _Stretch) -> str:
    if stretch.stated == 0:
        return "entry WHERE log = ?"
    return f"branch WHERE stated = {stretch.stated} AND log = ?"
