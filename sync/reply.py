"""Central's answer while it is put together: heads, acknowledgements, tails and scopes."""

import sqlite3
from dataclasses import dataclass
from typing import Any

from sync import ledger, wire
from sync.acknowledgement import Acknowledgement
from sync.asked import Asked
from sync.encoding import b64
from sync.entry import Entry
from sync.ledger import Head
from sync.replica import Replica

SAYS = {
    "gap": "Send this log from after the head that central holds.",
    "fork": "Central holds another history of this log. Take it, keep both, open a new log.",
    "unsigned": "This entry does not hold. It stays on the device; have it verified.",
    "not-enrolled": "Nobody enrolled the key that signed this. Enrol the device.",
    "not-yours": "This log is of another device.",
    "failed": "Central could not keep this log now. Its people must look; nothing is lost.",
}


@dataclass(frozen=True, slots=True)
class Refusal:
    """One log, not the request, was refused at a place; ``why`` is the stable reason."""

    log: str
    at: int
    why: str
    head: Head | None = None
    says: str = ""

    def as_wire(self) -> dict[str, Any]:
        """Return the form that travels, with central's head."""
        says = self.says or SAYS[self.why]
        return {
            "log": self.log,
            "at": self.at,
            "why": self.why,
            "says": says,
            **wire.pack_head(self.head),
        }


@dataclass
class Reply:
    """One answer while it is put together, within one view of the database."""

    replica: Replica
    db: sqlite3.Connection
    dev: str
    asked: Asked

    def __post_init__(self) -> None:
        self.heads: dict[str, Any] = {}
        self.acknowledgements: list[dict[str, Any]] = []
        self.tail: list[dict[str, Any]] = []
        self.pull: list[dict[str, Any]] = []
        self.regressed: list[str] = []
        self.denied: list[str] = []
        self.refused: list[Refusal] = []
        self.more = False
        self.entries_left = wire.MOST_ENTRIES
        self.bytes_left = wire.MOST_ENTRY_BYTES

    def state_heads(self) -> None:
        """State what is held of each log the device named, and sign for it."""
        at = self.replica.hooks.moment().at
        pushed = {log for log, _, _ in self.asked.push}
        for log in sorted({*self.asked.heads, *pushed}):
            owner = log_owner(self.db, log)
            if owner not in (None, self.dev):
                if log not in pushed:  # else it was refused with the push
                    self.refused.append(Refusal(log, 1, "not-yours"))
                continue
            held, theirs = ledger.head(self.db, log), self.asked.heads.get(log)
            meet = min(held.seq if held else 0, theirs.seq if theirs else 0)
            there = ledger.hash_at(self.db, log, meet) if meet else None
            self.heads[log] = {
                **wire.pack_head(held),
                "at": meet,
                "at_hash": b64(there) if there else "",
            }
            if held is not None:
                self._acknowledge(log, held, at)

    def _acknowledge(self, log: str, held: Head, at: str) -> None:
        # What this connection sees is committed, so the note is made after the commit.
        hooks = self.replica.hooks
        note = Acknowledgement.sign(
            hooks.realm, hooks.key, at=at, log=log, seq=held.seq, hash=held.hash
        )
        self.acknowledgements.append(note.as_wire())

    def read_tails(self) -> None:
        """Send a device the rest of its own logs from the last place both sides know."""
        for log, marks in self.asked.want.items():
            if log_owner(self.db, log) != self.dev or self.entries_left < 1:
                continue
            common = max(
                (mark.seq for mark in marks if ledger.hash_at(self.db, log, mark.seq) == mark.hash),
                default=0,
            )
            entries = ledger.read(
                self.db, log, common + 1, self.entries_left, max(self.bytes_left, 1)
            )
            self._spend(entries)
            self.tail.append({"log": log, "first": common + 1, "entries": wire.pack_all(entries)})

    def read_scopes(self) -> None:
        """Send what the granted scopes hold past the device's cursors, ``all`` first."""
        own = self.replica.hooks.own_logs(self.db)
        granted = self.replica.hooks.grants(self.db, self.dev)
        private = self.replica.hooks.sees_private(self.db, self.dev)
        for scope in sorted(self.asked.have, key=lambda scope: (scope != "all", scope)):
            if scope not in granted:
                self.denied.append(scope)
                continue
            after = self._cursors(scope)
            if self.entries_left < 1 or self.bytes_left < 1:
                self.more = True
                continue
            found = ledger.scoped(self.db, scope, after, self.entries_left + 1, first=own)
            sent = self._fitting(found)
            self.more = self.more or len(sent) < len(found)
            self._spend(sent)
            for log in dict.fromkeys(entry.log for entry in sent):
                mine = [entry for entry in sent if entry.log == log]
                packed = wire.pack_all(mine, private=private)
                self.pull.append({"scope": scope, "log": log, "entries": packed})

    def _cursors(self, scope: str) -> dict[str, Head]:
        never = Head(2**62, b"")  # nothing is past it: logs that travel whole, or not now
        after = {log: never for log in (*self.asked.heads, *self.asked.skip)}
        for log, (place, sum_) in self.asked.have[scope].items():
            if log in after:
                continue
            # Without a sum the device is pulling this log again, after it gave back what it had.
            if sum_ in ("", ledger.gist(self.db, scope, log, place)):
                after[log] = place
                continue
            after[log] = never
            if log not in self.regressed:
                self.regressed.append(log)
        return after

    def _fitting(self, found: list[Entry]) -> list[Entry]:
        size = 0
        fitting: list[Entry] = []
        for entry in found[: self.entries_left]:
            size += len(entry.body) + len(entry.private or b"")
            if fitting and size > self.bytes_left:
                break
            fitting.append(entry)
        return fitting

    def _spend(self, sent: list[Entry]) -> None:
        self.entries_left -= len(sent)
        self.bytes_left -= sum(len(entry.body) + len(entry.private or b"") for entry in sent)


def log_owner(db: sqlite3.Connection, log: str) -> str | None:
    """Return the device whose whole log this is, or None if it is not held."""
    first = ledger.read(db, log, 1, 1)
    return str(first[0].fields()["dev"]) if first else None
