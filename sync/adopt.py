"""What happens to a log when central holds more of it, or another history of it."""

import sqlite3
import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sync import ledger
from sync.encoding import b64, unb64
from sync.entry import CARRIED, Entry, Realm, digest, scopes_of
from sync.errors import BadEntry
from sync.follow import follow
from sync.ledger import Head
from sync.replica import Replica
from sync.wire import claim

LONG_TEXT = 16 * 1024  # bytes; a longer original is carried deflated, to stay below the limit
MOST_CARRIED = 64 * 1024  # bytes of a deflated original, unpacked


@dataclass(frozen=True, slots=True)
class Adopted:
    """What came of it: own entries carried over, entries that are new here, last common place."""

    carried: int = 0
    fresh: int = 0
    common: Head | None = None


def adopt(replica: Replica, log: str, theirs: Sequence[Entry]) -> Adopted:
    """Take over a verified run of central's history of an own log.

    Central's history wins in this log and nothing is dropped: what this device wrote in its
    place is carried into the current log, original bytes and signature inside.

    Raises:
        BadEntry: The run does not hang together or does not hang on what is held.
    """
    _check_run(log, theirs)
    if not theirs:
        return Adopted()
    with replica.hooks.transaction() as db:
        first = theirs[0]
        before = ledger.hash_at(db, log, first.seq - 1) if first.seq > 1 else b""
        if before is None or first.fields()["prev"] != b64(before):
            raise BadEntry("central's history does not hang on what is held here")
        mine = [ledger.hash_at(db, log, entry.seq) for entry in theirs]
        same = next((n for n, hash_ in enumerate(mine) if hash_ != theirs[n].hash), len(theirs))
        if same == len(theirs):
            return Adopted(common=Head(theirs[-1].seq, theirs[-1].hash))
        rest = theirs[same:]
        _leave(replica, db, log, "behind" if mine[same] is None else "fork")
        lost = [] if mine[same] is None else _from(db, log, rest[0].seq)
        fresh = _keep(replica, db, log, rest, forked=bool(lost))
        for entry in lost:
            parcel = replica.hooks.write(
                db, CARRIED, carry(entry), refs=[b64(entry.hash)], blobs=_blobs(entry)
            )
            ledger.note_carriage(db, entry.hash, parcel.hash)
        return Adopted(len(lost), fresh, Head(rest[-1].seq, rest[-1].hash))


def carry(entry: Entry) -> dict[str, Any]:
    """Return the data by which one entry is carried in another; of a carried one the inner."""
    fields = entry.fields()
    if fields["kind"] == CARRIED:
        return dict(fields["data"])
    data: dict[str, Any] = {"scope": scopes_of(fields), "sig": b64(entry.sig)}
    if isinstance(fields.get("priv"), Mapping):
        data["priv"] = fields["priv"]
    if len(entry.body) > LONG_TEXT:
        data["deflated"] = b64(zlib.compress(entry.body, 9))
    else:
        data["orig"] = entry.body.decode("utf-8")
    return data


def _blobs(entry: Entry) -> list[Mapping[str, Any]]:
    """Return the blobs an entry names: what carries it names them too, so that they travel."""
    named = entry.fields().get("blobs")
    return [one for one in named if isinstance(one, Mapping)] if isinstance(named, list) else []


def carried(realm: Realm, fields: Mapping[str, Any]) -> Entry:
    """Return the entry inside a ``log.carried``; it still has to be verified.

    Raises:
        BadEntry: There is none that can be read.
    """
    try:
        data = fields["data"]
        if "orig" in data:
            body = data["orig"].encode("utf-8")
        else:
            body = zlib.decompressobj().decompress(unb64(data["deflated"]), MOST_CARRIED)
        sig = unb64(data["sig"])
    except (AttributeError, KeyError, TypeError, ValueError, zlib.error) as fault:
        raise BadEntry("the entry carried in it cannot be read") from fault
    said = claim(body)
    return Entry(said.log, said.seq, digest(realm, body), body, sig)


def _check_run(log: str, theirs: Sequence[Entry]) -> None:
    for number, entry in enumerate(theirs):
        if entry.log != log or entry.seq != theirs[0].seq + number:
            raise BadEntry("central's history of this log has a gap")
        if number and entry.fields()["prev"] != b64(theirs[number - 1].hash):
            raise BadEntry("central's history of this log does not hang together")


def _leave(replica: Replica, db: sqlite3.Connection, log: str, why: str) -> None:
    if replica.hooks.own_logs(db)[-1] == log:
        replica.hooks.open_log(db, why)


def _from(db: sqlite3.Connection, log: str, first: int) -> list[Entry]:
    found: list[Entry] = []
    while True:
        more = ledger.read(db, log, first + len(found), 500)
        if not more:
            return found
        found += more


def _keep(
    replica: Replica, db: sqlite3.Connection, log: str, rest: Sequence[Entry], *, forked: bool
) -> int:
    pin = replica.hooks.central()
    at, frm = replica.hooks.moment().at, pin.dev if pin else ""
    fresh = [entry for entry in rest if not ledger.holds(db, entry.hash)]
    stated = ledger.next_stated(db, log) if forked else ledger.last_stated(db, log)
    for entry in rest:
        if stated:
            ledger.add_branch(db, entry, stated=stated, at=at, frm=frm, realm=replica.realm)
        else:
            ledger.add(db, entry, at=at, frm=frm, realm=replica.realm)
    follow(replica, db, fresh)
    return len(fresh)
