"""Page tables follow the ledger; an entry that they cannot take hurts them and not the ledger."""

import sqlite3
from collections.abc import Sequence

from sync.entry import Entry
from sync.replica import Replica

# What odd data may raise in page tables. Faults of disk and database are not among them: those
# must end the transaction and be seen.
ODD_DATA = (
    ArithmeticError,
    AttributeError,
    LookupError,
    TypeError,
    ValueError,
    RecursionError,
    sqlite3.DataError,
    sqlite3.IntegrityError,
    sqlite3.InterfaceError,
    sqlite3.ProgrammingError,
)


def follow(replica: Replica, db: sqlite3.Connection, entries: Sequence[Entry]) -> None:
    """Let page tables follow entries that are new here, within the caller's transaction.

    If they stumble, each entry is tried alone; those that fail are kept in the ledger all the
    same and listed in the table ``unfollowed`` for a person. So one odd entry holds up nothing.
    """
    if not entries:
        return
    if _tried(replica, db, entries) is None:
        return
    for entry in entries:
        fault = _tried(replica, db, [entry])
        if fault is not None:
            db.execute(
                "INSERT INTO unfollowed VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING",
                (entry.hash, entry.log, entry.seq, f"{type(fault).__name__}: {fault}"),
            )


def _tried(replica: Replica, db: sqlite3.Connection, entries: Sequence[Entry]) -> Exception | None:
    db.execute("SAVEPOINT sync_follow")
    try:
        replica.hooks.follow(db, entries)
    except ODD_DATA as fault:
        db.execute("ROLLBACK TO sync_follow")
        db.execute("RELEASE sync_follow")
        return fault
    db.execute("RELEASE sync_follow")
    return None
