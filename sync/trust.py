"""Whose key an entry is verified with, on either side."""

import sqlite3

from sync import wire
from sync.entry import Entry, verify
from sync.errors import BadEntry
from sync.replica import Replica


def verified_alone(replica: Replica, db: sqlite3.Connection, entry: Entry) -> Entry:
    """Return an entry after it was verified with the key that this node knows for its author.

    Raises:
        BadEntry: It does not hold, or nobody here knows the key.
    """
    said = wire.claim(entry.body)
    public = replica.public_key(db, said.dev, said.key)
    if public is None:
        raise BadEntry(f"nobody here knows the key {said.key} of {said.dev}")
    verify(replica.realm, entry, public)
    return entry
