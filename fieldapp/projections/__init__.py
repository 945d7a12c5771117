"""Tables that pages read; rebuilt from the ledger at any time. ``follow`` is the one way in."""

import json
import sqlite3
from collections.abc import Iterable, Iterator
from typing import Protocol

from fieldapp.projections.facts import hash_name
from fieldapp.projections.facts import take as take
from fieldapp.projections.summaries import refresh as refresh
from fieldapp.projections.tables import VERSION as VERSION
from fieldapp.projections.tables import drop_tables, make_tables


class Verified(Protocol):
    """What ``follow`` needs of an entry: its hash and the body that was verified."""

    @property
    def hash(self) -> bytes: ...
    @property
    def body(self) -> bytes: ...


def follow(db: sqlite3.Connection, entries: Iterable[Verified]) -> set[str]:
    """Bring the page tables after these verified entries, in the caller's transaction.

    Returns the subjects that were told anew.
    """
    dirty: set[str] = set()
    for entry in entries:
        dirty |= take(db, hash_name(entry.hash), json.loads(entry.body))
    refresh(db, dirty)
    return dirty


def rebuild(db: sqlite3.Connection, entries: Iterator[Verified]) -> int:
    """Make all page tables anew from the ledger; returns how many entries were read."""
    drop_tables(db)
    make_tables(db)
    dirty: set[str] = set()
    count = 0
    for entry in entries:
        dirty |= take(db, hash_name(entry.hash), json.loads(entry.body))
        count += 1
    refresh(db, dirty)
    return count
