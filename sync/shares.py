"""What passes between nodes: entries by scope, cursors, acknowledgements."""

import sqlite3
from collections.abc import Iterator, Mapping, Sequence

from sync.acknowledgement import Acknowledgement
from sync.entry import Entry, Realm
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

GIST_BYTES = 16
BEGINNING = Head(0, b"")


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
    known = holds(db, entry.hash)
    kept = db.execute(
        "SELECT 1 FROM entry WHERE hash = :h UNION ALL SELECT 1 FROM borrowed WHERE hash = :h",
        {"h": entry.hash},
    ).fetchone()
    if kept is None:
        db.execute(
            "INSERT INTO borrowed VALUES (?, ?, ?, ?, ?, ?, ?)",
            (entry.log, entry.seq, entry.hash, entry.body, entry.sig, at, frm),
        )
        read_back(db, "borrowed", entry, realm)
        if b'"blobs":[{' in entry.body:  # spares parsing of the many that name none
            index_blobs(db, entry, entry.fields())
    keep_private(db, entry)
    index_scopes(db, entry, [scope] if isinstance(scope, str) else scope)
    return not known


def borrowed_of(
    db: sqlite3.Connection, log: str, after: tuple[int, bytes], most: int
) -> list[Entry]:
    """Return the borrowed entries of one log past (seq, hash), private parts attached."""
    rows = db.execute(
        f"SELECT {ROW} FROM borrowed WHERE log = ? AND (seq, hash) > (?, ?) "
        "ORDER BY seq, hash LIMIT ?",
        (log, *after, most),
    ).fetchall()
    return [with_private(db, entry_of(row)) for row in rows]


def cursors(db: sqlite3.Connection, scope: str) -> dict[str, Head]:
    """Return by log the last entry that was borrowed under one scope.

    Nothing is remembered apart from the entries themselves, so nothing can disagree with them.
    """
    found: dict[str, Head] = {}
    for log in _logs_of_scope(db, scope):
        row = db.execute(
            "SELECT seq, hash FROM entry_scope WHERE scope = ? AND log = ? "
            "ORDER BY seq DESC, hash DESC LIMIT 1",
            (scope, log),
        ).fetchone()
        found[log] = Head(row[0], bytes(row[1]))
    return found


def gist(db: sqlite3.Connection, scope: str, log: str, upto: Head) -> str:
    """Return a short sum of all that one scope holds of a log up to a place, in any order.

    Two nodes with equal sums hold the same; the place alone would hide what is missing before it.
    """
    count, total = 0, 0
    rows = db.execute(
        "SELECT hash FROM entry_scope WHERE scope = ? AND log = ? AND (seq, hash) <= (?, ?)",
        (scope, log, upto.seq, upto.hash),
    )
    for (hash_,) in rows:
        count += 1
        total ^= int.from_bytes(hash_[:GIST_BYTES], "big")
    return f"{count}.{total:x}"


def drop_scope(db: sqlite3.Connection, scope: str) -> None:
    """Give back what was borrowed by one scope and by no other; its cursors go with it."""
    db.execute(
        "DELETE FROM entry_scope WHERE scope = ? AND hash IN (SELECT hash FROM borrowed)",
        (scope,),
    )
    db.execute("DELETE FROM borrowed WHERE hash NOT IN (SELECT hash FROM entry_scope)")


def scoped(
    db: sqlite3.Connection,
    scope: str,
    after: Mapping[str, Head],
    most: int,
    *,
    first: Sequence[str] = (),
) -> list[Entry]:
    """Return what one scope holds past the cursors, by (log, seq), at most so many.

    A log without a cursor starts at its beginning. The logs named ``first`` come before the
    others: with them come the keys that the others are verified with.
    """
    found: list[Entry] = []
    for log in dict.fromkeys((*first, *_logs_of_scope(db, scope))):
        start = after.get(log, BEGINNING)
        rows = db.execute(
            "SELECT hash FROM entry_scope WHERE scope = ? AND log = ? AND (seq, hash) > (?, ?) "
            "ORDER BY seq, hash LIMIT ?",
            (scope, log, start.seq, start.hash, most - len(found)),
        ).fetchall()
        for (hash_,) in rows:
            entry = find(db, hash_)
            if entry is not None:
                found.append(entry)
        if len(found) >= most:
            break
    return found


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


def note_carriage(db: sqlite3.Connection, hash: bytes, parcel: bytes) -> None:
    """Remember which entry carried one over, the last one that did."""
    db.execute(
        "INSERT INTO carriage VALUES (?, ?) ON CONFLICT (hash) "
        "DO UPDATE SET parcel = excluded.parcel",
        (hash, parcel),
    )


def carried_by(db: sqlite3.Connection, hash: bytes) -> bytes | None:
    """Return the hash of the entry that carried this one over, or None."""
    row = db.execute("SELECT parcel FROM carriage WHERE hash = ?", (hash,)).fetchone()
    return None if row is None else bytes(row[0])
