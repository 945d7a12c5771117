"""The answering side: takes logs in order, keeps both sides of a fork, serves scopes.

Acceptance looks at signature and order only; meaning is judged later by a person. The server
remembers nothing about a device between requests.
"""

import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sync import ledger, wire
from sync.acknowledgement import Acknowledgement
from sync.encoding import b64
from sync.entry import OPENED, Entry, scopes_of, verify
from sync.errors import BadEntry
from sync.follow import ODD_DATA, follow
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


def accept_push(replica: Replica, dev: str, log: str, first: int, sent: list[Any]) -> list[Refusal]:
    """Take part of a device's own log; return what was refused of it, at most one refusal.

    Everything is verified before the write lock is taken. What holds is kept up to the first
    entry that does not.
    """
    entries, refusal = _verified(replica, dev, log, first, sent)
    try:
        refused = _append(replica, log, entries, dev) if entries else None
    except ODD_DATA:
        refused = Refusal(log, first, "failed")
    refusal = refused or refusal
    return [] if refusal is None else [refusal]


def accept_returned(replica: Replica, dev: str, log: str, sent: list[Any]) -> list[Refusal]:
    """Take back single entries that this node lost, each verified alone."""
    refusals: list[Refusal] = []
    entries: list[Entry] = []
    with replica.hooks.reading() as db:
        for value in sent:
            try:
                entries.append(verified_alone(replica, db, wire.unpack(replica.realm, value)))
            except BadEntry as fault:
                refusals.append(Refusal(log, 0, "unsigned", says=str(fault)))
    at = replica.hooks.moment().at
    try:
        with replica.hooks.transaction() as db:
            fresh = []
            for entry in entries:
                scopes = scopes_of(entry.fields())
                if ledger.borrow(db, entry, scope=scopes, at=at, frm=dev, realm=replica.realm):
                    fresh.append(entry)
            follow(replica, db, fresh)
    except ODD_DATA:
        refusals.append(Refusal(log, 0, "failed"))
    return refusals


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


def answer_exchange(replica: Replica, dev: str, request: Mapping[str, Any]) -> dict[str, Any]:
    """Take what a device sends and answer with heads, acknowledgements and what it lacks.

    Raises:
        sync.errors.Refused: The request has no shape that any version sends; nothing was taken.
    """
    asked = _Asked.read(request)
    refused: list[Refusal] = []
    for log, first, sent in asked.push:
        refused += accept_push(replica, dev, log, first, sent)
    for log, sent in asked.returned:
        refused += accept_returned(replica, dev, log, sent)
    with replica.hooks.reading() as db:
        answer = _Answer(replica, db, dev, asked)
        answer.state_heads()
        answer.read_tails()
        answer.read_scopes()
    refused += answer.refused
    return {
        "proto": wire.PROTO,
        "now": replica.hooks.moment().at,
        "heads": answer.heads,
        "acknowledgements": answer.acknowledgements,
        "refused": [refusal.as_wire() for refusal in refused],
        "tail": answer.tail,
        "pull": answer.pull,
        "more": answer.more,
        "regressed": answer.regressed,
        "denied": answer.denied,
        "blobs_missing": [],
        "blobs_received": [],
        "keys": [],
    }


@dataclass(frozen=True, slots=True)
class _Asked:
    """A request whose shape was checked; its entries were not."""

    heads: dict[str, Head | None]
    push: list[tuple[str, int, list[Any]]]
    returned: list[tuple[str, list[Any]]]
    want: dict[str, list[Head]]
    have: dict[str, dict[str, Head]]
    skip: frozenset[str]

    @classmethod
    def read(cls, request: Mapping[str, Any]) -> "_Asked":
        """Check the shape of the whole request before any of it is acted on."""
        push = [_read_push(piece) for piece in wire.read_list(request.get("push"), "push")]
        returned = [
            (wire.read_log(piece.get("log")), wire.read_list(piece.get("entries"), "entries"))
            for piece in (
                wire.read_mapping(value, "returned")
                for value in wire.read_list(request.get("returned"), "returned")
            )
        ]
        sent = sum(len(piece[2]) for piece in push) + sum(len(piece[1]) for piece in returned)
        if sent > wire.MOST_ENTRIES:
            raise wire.too_large(f"{sent} entries came and {wire.MOST_ENTRIES} are allowed")
        have = wire.read_mapping(request.get("have"), "have")
        if len(have) > wire.MOST_SCOPES:
            raise wire.malformed("too many scopes")
        return cls(
            heads=wire.read_heads(request.get("heads")),
            push=push,
            returned=returned,
            want={
                wire.read_log(log): [
                    head
                    for value in wire.read_list(marks, "want")
                    if (head := wire.read_head(value))
                ]
                for log, marks in wire.read_mapping(request.get("want"), "want").items()
            },
            have={
                scope: {log: head for log, head in wire.read_heads(logs).items() if head}
                for scope, logs in have.items()
            },
            skip=frozenset(
                wire.read_log(log) for log in wire.read_list(request.get("skip"), "skip")
            ),
        )


def _read_push(value: object) -> tuple[str, int, list[Any]]:
    piece = wire.read_mapping(value, "push")
    first = piece.get("first")
    if type(first) is not int or first < 1:
        raise wire.malformed("a push does not say with which entry it begins")
    return wire.read_log(piece.get("log")), first, wire.read_list(piece.get("entries"), "entries")


@dataclass
class _Answer:
    """One answer while it is put together, within one view of the database."""

    replica: Replica
    db: sqlite3.Connection
    dev: str
    asked: _Asked

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
            after = self._cursors(self.asked.have[scope])
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

    def _cursors(self, have: dict[str, Head]) -> dict[str, Head]:
        never = Head(2**62, b"")  # nothing is past it: logs that travel whole, or not now
        after = {log: never for log in (*self.asked.heads, *self.asked.skip)}
        for log, place in have.items():
            if log in after:
                continue
            held = ledger.find(self.db, place.hash)
            if held is not None and (held.log, held.seq) == (log, place.seq):
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


def _verified(
    replica: Replica, dev: str, log: str, first: int, sent: list[Any]
) -> tuple[list[Entry], Refusal | None]:
    """Return the entries that hold, up to the first that does not, and why that does not."""
    entries: list[Entry] = []
    with replica.hooks.reading() as db:
        held, owner = ledger.head(db, log), log_owner(db, log)
        if owner not in (None, dev):
            return [], Refusal(log, first, "not-yours")
        for seq, value in enumerate(sent, first):
            try:
                entry = wire.unpack(replica.realm, value)
                said = wire.claim(entry.body)
                public = replica.public_key(db, said.dev, said.key)
                if said.dev != dev:
                    return entries, Refusal(log, seq, "not-yours", held)
                if public is None:
                    return entries, Refusal(log, seq, "not-enrolled", held)
                entry = Entry(log, seq, entry.hash, entry.body, entry.sig, entry.private)
                _check_chain(verify(replica.realm, entry, public), public, entries)
            except BadEntry as fault:
                return entries, Refusal(log, seq, "unsigned", held, str(fault))
            entries.append(entry)
    return entries, None


def _check_chain(fields: Mapping[str, Any], public: bytes, before: list[Entry]) -> None:
    if before and fields["prev"] != b64(before[-1].hash):
        raise BadEntry("it does not follow from the entry sent before it")
    if fields["seq"] == 1:
        data = fields.get("data")
        stated = data.get("public_key") if isinstance(data, Mapping) else None
        if fields["kind"] != OPENED or stated != b64(public) or fields["prev"] != "":
            raise BadEntry("it does not open its log with the key that signed it")


def _append(replica: Replica, log: str, entries: list[Entry], dev: str) -> Refusal | None:
    hooks = replica.hooks
    at = hooks.moment().at
    with hooks.transaction() as db:
        held = ledger.head(db, log)
        last = held.seq if held else 0
        if entries[0].seq > last + 1:
            return Refusal(log, entries[0].seq, "gap", held)
        known = [ledger.hash_at(db, log, entry.seq) for entry in entries if entry.seq <= last]
        fresh = entries[len(known) :]
        parts = next((n for n, hash_ in enumerate(known) if entries[n].hash != hash_), None)
        follows = not fresh or fresh[0].fields()["prev"] == b64(held.hash if held else b"")
        if parts is None and not follows:
            parts = len(known)
        if parts is not None:
            for entry in entries[parts:]:
                ledger.add_branch(db, entry, at=at, frm=dev, realm=replica.realm)
            return Refusal(log, entries[parts].seq, "fork", held)
        new = [entry for entry in fresh if not ledger.holds(db, entry.hash)]
        for entry in fresh:
            ledger.add(db, entry, at=at, frm=dev, realm=replica.realm)
        follow(replica, db, new)
    return None
