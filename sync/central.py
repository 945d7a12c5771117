"""The answering side: takes logs in order, keeps both sides of a fork, serves scopes.

Acceptance looks at signature and order only; meaning is judged later by a person. The server
remembers nothing about a device between requests.
"""

from collections.abc import Mapping
from typing import Any

from sync import blobs, ledger, wire
from sync.asked import Asked
from sync.encoding import b64
from sync.entry import OPENED, Entry, scopes_of, verify
from sync.errors import BadEntry
from sync.follow import ODD_DATA, follow
from sync.replica import Replica
from sync.reply import Refusal, Reply, log_owner
from sync.trust import verified_alone


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
    if not entries:
        return refusals
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


def answer_exchange(replica: Replica, dev: str, request: Mapping[str, Any]) -> dict[str, Any]:
    """Take what a device sends and answer with heads, acknowledgements and what it lacks.

    Raises:
        sync.errors.Refused: The request has no shape that any version sends; nothing was taken.
    """
    asked = Asked.read(request)
    refused: list[Refusal] = []
    for log, first, sent in asked.push:
        refused += accept_push(replica, dev, log, first, sent)
    for log, sent in asked.returned:
        refused += accept_returned(replica, dev, log, sent)
    with replica.hooks.reading() as db:
        answer = Reply(replica, db, dev, asked)
        answer.state_heads()
        answer.read_tails()
        answer.read_scopes()
        shelf = replica.hooks.shelf
        missing = blobs.missing(db, shelf, answer.heads)
        held = blobs.held(db, shelf, asked.blobs)
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
        "blobs_missing": missing,
        "blobs_received": held,
        "keys": [],
    }


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
