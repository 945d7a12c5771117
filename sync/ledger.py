"""The record in SQLite: append, read, heads, scopes. The caller opens and ends transactions."""

import hashlib
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

from sync.acknowledgement import Acknowledgement
from sync.encoding import b64, unb64
from sync.entry import Entry, Realm, digest, private_part, scopes_of
from sync.errors import Fork, Gap, NotKept
from sync.tables import make_tables, prepare

__all__ = [
    "Head",
    "acknowledged",
    "add",
    "add_branch",
    "borrow",
    "borrowed_of",
    "cursors",
    "drop_acknowledgement",
    "drop_cursors",
    "drop_scope",
    "find",
    "hash_at",
    "head",
    "heads",
    "keep_acknowledgement",
    "keep_private",
    "logs",
    "make_tables",
    "next_stated",
    "prepare",
    "read",
    "scoped",
    "set_cursor",
]

MOST_BYTES = 1 << 20
NO_ENTRY = b""
ROW = "log, seq, hash, body, sig"
Row = tuple[str, int, bytes, bytes, bytes]


@dataclass(frozen=True, slots=True)
class Head:
    """A place in a log and the hash there, which says everything about what is before it."""

    seq: int
    hash: bytes


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
            entry = with_private(db, _entry(row))
            size += len(entry.body) + len(entry.private or b"")
            if found and size > most_bytes:
                return found
            found.append(entry)
    return found


def find(db: sqlite3.Connection, hash: bytes) -> Entry | None:
    """Return the entry of this hash: from whole logs, else borrowed, else of a branch."""
    for table in ("entry", "borrowed", "branch"):
        row = db.execute(f"SELECT {ROW} FROM {table} WHERE hash = ? LIMIT 1", (hash,)).fetchone()
        if row is not None:
            return with_private(db, _entry(row))
    return None


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
    _read_back(db, "entry", entry, realm)
    db.execute("DELETE FROM borrowed WHERE hash = ?", (entry.hash,))
    keep_private(db, entry)
    _index(db, entry, scopes_of(fields))


def borrow(
    db: sqlite3.Connection,
    entry: Entry,
    *,
    scope: str | Sequence[str],
    at: str,
    frm: str,
    realm: Realm | None = None,
) -> bool:
    """Keep one verified entry of another's log under the scope it was pulled by.

    Returns whether the node did not hold it before, so that it has to be followed.
    """
    known = db.execute(
        "SELECT 1 FROM entry WHERE hash = :h UNION ALL SELECT 1 FROM borrowed WHERE hash = :h",
        {"h": entry.hash},
    ).fetchone()
    if known is None:
        db.execute(
            "INSERT INTO borrowed VALUES (?, ?, ?, ?, ?, ?, ?)",
            (entry.log, entry.seq, entry.hash, entry.body, entry.sig, at, frm),
        )
        _read_back(db, "borrowed", entry, realm)
    keep_private(db, entry)
    _index(db, entry, [scope] if isinstance(scope, str) else scope)
    return known is None


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
    _read_back(db, "branch", entry, realm)
    keep_private(db, entry)
    return True


def next_stated(db: sqlite3.Connection, log: str) -> int:
    """Return the mark for a newly learned history of this log."""
    row = db.execute("SELECT COALESCE(MAX(stated), 0) FROM branch WHERE log = ?", (log,))
    return int(row.fetchone()[0]) + 1


def last_stated(db: sqlite3.Connection, log: str) -> int:
    """Return the mark of the history that heads are stated by; 0 is the log's own."""
    stretches = _stretches(db, log)
    return stretches[-1].stated if stretches else 0


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


def set_cursor(db: sqlite3.Connection, scope: str, log: str, place: Head) -> None:
    """Remember the entry last got of one log under one scope."""
    db.execute(
        "INSERT INTO cursor VALUES (?, ?, ?, ?) ON CONFLICT (scope, log) "
        "DO UPDATE SET seq = excluded.seq, hash = excluded.hash",
        (scope, log, place.seq, place.hash),
    )


def cursors(db: sqlite3.Connection) -> dict[str, dict[str, Head]]:
    """Return by scope and log the entry last got."""
    found: dict[str, dict[str, Head]] = {}
    for scope, log, seq, hash_ in db.execute("SELECT scope, log, seq, hash FROM cursor"):
        found.setdefault(scope, {})[log] = Head(seq, bytes(hash_))
    return found


def drop_cursors(db: sqlite3.Connection, log: str) -> None:
    """Forget how far one log was got, so that it is pulled again from its beginning."""
    db.execute("DELETE FROM cursor WHERE log = ?", (log,))


def drop_scope(db: sqlite3.Connection, scope: str) -> None:
    """Give back what was borrowed by one scope and by no other, with its cursors."""
    db.execute("DELETE FROM cursor WHERE scope = ?", (scope,))
    db.execute(
        "DELETE FROM entry_scope WHERE scope = ? AND hash IN (SELECT hash FROM borrowed)",
        (scope,),
    )
    db.execute("DELETE FROM borrowed WHERE hash NOT IN (SELECT hash FROM entry_scope)")


def scoped(db: sqlite3.Connection, scope: str, after: Mapping[str, Head], most: int) -> list[Entry]:
    """Return what one scope holds past the cursors, by (log, seq), at most so many.

    A log without a cursor starts at its beginning.
    """
    found: list[Entry] = []
    for log in _logs_of_scope(db, scope):
        start = after[log].seq if log in after else 0
        rows = db.execute(
            "SELECT hash FROM entry_scope WHERE scope = ? AND log = ? AND seq > ? "
            "ORDER BY seq, hash LIMIT ?",
            (scope, log, start, most - len(found)),
        ).fetchall()
        for (hash_,) in rows:
            entry = find(db, hash_)
            if entry is not None:
                found.append(entry)
        if len(found) >= most:
            break
    return found


def borrowed_of(db: sqlite3.Connection, log: str, after: int, most: int) -> list[Entry]:
    """Return the borrowed entries of one log past a place, in order, private parts attached."""
    rows = db.execute(
        f"SELECT {ROW} FROM borrowed WHERE log = ? AND seq > ? ORDER BY seq, hash LIMIT ?",
        (log, after, most),
    ).fetchall()
    return [with_private(db, _entry(row)) for row in rows]


def acknowledged(db: sqlite3.Connection, log: str) -> Acknowledgement | None:
    """Return central's last verified acknowledgement for a log, or None."""
    row = db.execute(
        "SELECT at, hash, key, log, seq, sig FROM acknowledgement WHERE log = ?", (log,)
    ).fetchone()
    return None if row is None else Acknowledgement(*row)


def keep_acknowledgement(db: sqlite3.Connection, given: Acknowledgement) -> None:
    """Keep a verified acknowledgement in place of the log's last one."""
    db.execute(
        "INSERT INTO acknowledgement (log, seq, hash, at, key, sig) VALUES (?, ?, ?, ?, ?, ?) "
        "ON CONFLICT (log) DO UPDATE SET seq = excluded.seq, hash = excluded.hash, "
        "at = excluded.at, key = excluded.key, sig = excluded.sig",
        (given.log, given.seq, given.hash, given.at, given.key, given.sig),
    )


def drop_acknowledgement(db: sqlite3.Connection, log: str) -> None:
    """Take "received" back to "waiting": central no longer holds what it acknowledged."""
    db.execute("DELETE FROM acknowledgement WHERE log = ?", (log,))


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


def _entry(row: Row) -> Entry:
    log, seq, hash_, body, sig = row
    return Entry(log, seq, bytes(hash_), bytes(body), bytes(sig))


def _index(db: sqlite3.Connection, entry: Entry, scopes: Sequence[str]) -> None:
    # ON CONFLICT, not OR IGNORE: only the very same row may be there already.
    db.executemany(
        "INSERT INTO entry_scope VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING",
        [(scope, entry.log, entry.seq, entry.hash) for scope in scopes],
    )


def _logs_of_scope(db: sqlite3.Connection, scope: str) -> Iterator[str]:
    log = ""
    while True:
        row = db.execute(
            "SELECT MIN(log) FROM entry_scope WHERE scope = ? AND log > ?", (scope, log)
        ).fetchone()
        if row[0] is None:
            return
        log = row[0]
        yield log


def _read_back(db: sqlite3.Connection, table: str, entry: Entry, realm: Realm | None) -> None:
    row = db.execute(
        f"SELECT {ROW} FROM {table} WHERE log = ? AND seq = ? AND hash = ?",
        (entry.log, entry.seq, entry.hash),
    ).fetchone()
    kept = None if row is None else _entry(row)
    wanted = Entry(entry.log, entry.seq, entry.hash, entry.body, entry.sig)
    if kept != wanted or (realm is not None and digest(realm, kept.body) != kept.hash):
        raise NotKept(entry.log, entry.seq)
