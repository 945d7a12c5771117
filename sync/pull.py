"""What one run of a device has learned, and how it borrows what its scopes bring."""

import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from sync import ledger, wire
from sync.answered import Answered
from sync.entry import Entry
from sync.errors import BadEntry
from sync.follow import ODD_DATA, follow
from sync.ledger import Head
from sync.replica import Replica
from sync.trust import verified_alone

NOTHING = {"seq": 0, "hash": ""}


@dataclass
class Run:
    """What one run has learned; nothing of it outlives the run."""

    most: int = wire.MOST_ENTRIES
    most_bytes: int = wire.MOST_ENTRY_BYTES
    at_central: dict[str, Head | None] = field(default_factory=dict)
    fetch: dict[str, Head | None] = field(default_factory=dict)  # log -> place known to be common
    returning: dict[str, tuple[int, bytes]] = field(default_factory=dict)
    again: dict[tuple[str, str], Head] = field(default_factory=dict)  # last pulled in this run
    returned: set[str] = field(default_factory=set)
    skip: set[str] = field(default_factory=set)
    tries: dict[str, int] = field(default_factory=dict)
    blocked: set[str] = field(default_factory=set)
    refused: list[dict[str, Any]] = field(default_factory=list)
    denied: set[str] = field(default_factory=set)
    regressed: set[str] = field(default_factory=set)
    pushed: int = 0
    pulled: int = 0
    carried: int = 0
    more: bool = False
    sent_back: dict[str, list[Entry]] = field(default_factory=dict)
    missing: dict[str, int] = field(default_factory=dict)  # blobs, as central said last


def take_pull(replica: Replica, run: Run, request: Mapping[str, Any], said: Answered) -> bool:
    """Borrow what the answer brings by scope, each entry verified alone, and move the cursors."""
    moved = False
    for scope, log, sent in said.pulls:
        if scope not in request["have"] or log in run.skip:
            continue  # nothing of the kind was asked for
        past = wire.read_head(request["have"][scope].get(log, NOTHING))
        entries: list[Entry] = []
        with replica.hooks.reading() as db:
            for one in sent:
                try:
                    entries.append(_pulled(replica, db, log, one, past))
                except BadEntry as fault:
                    hold_back(run, log, fault)
                    moved = True
                    break
        if entries:
            moved |= _borrow(replica, run, scope, log, entries)
    return moved


def _pulled(
    replica: Replica, db: sqlite3.Connection, log: str, value: object, past: Head | None
) -> Entry:
    entry = verified_alone(replica, db, wire.unpack(replica.realm, value))
    if entry.log != log:
        raise BadEntry("it is of another log than it was sent for")
    if past is not None and (entry.seq, entry.hash) <= (past.seq, past.hash):
        raise BadEntry("it was sent though it is held already")
    return entry


def _borrow(replica: Replica, run: Run, scope: str, log: str, entries: list[Entry]) -> bool:
    pin = replica.hooks.central()
    at, frm = replica.hooks.moment().at, pin.dev if pin else ""
    try:
        with replica.hooks.transaction() as db:
            fresh = [
                entry
                for entry in entries
                if ledger.borrow(db, entry, scope=scope, at=at, frm=frm, realm=replica.realm)
            ]
            follow(replica, db, fresh)
    except ODD_DATA as fault:
        hold_back(run, log, fault)
        return True
    run.pulled += len(fresh)
    run.again[scope, log] = Head(entries[-1].seq, entries[-1].hash)
    return True


def hold_back(run: Run, log: str, fault: Exception) -> None:
    """Leave one log where it is for this run and say why; the others go on."""
    why = "unverified" if isinstance(fault, BadEntry) else "failed"
    run.skip.add(log)
    run.blocked.add(log)
    run.refused.append({"log": log, "at": 0, "why": why, "says": str(fault)})
