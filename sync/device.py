"""The asking side: says what it has, believes only the present answer, loses nothing.

========================  ==========================  =====================================
central says              that means                  this device does
========================  ==========================  =====================================
same hash, no more        normal, or central was      pushes what lies past central's head;
                          restored                    takes "received" back if that fell
same hash, more           this device was restored    fetches the rest, opens a new log
other hash                a fork                      fetches central's history, opens a new
                                                      log, carries its own entries over
========================  ==========================  =====================================
"""

import sqlite3
from collections.abc import Mapping
from typing import Any

from sync import blobs, ledger, wire
from sync.adopt import adopt
from sync.answered import Answered
from sync.compare import View
from sync.errors import BadEntry, Unwritable
from sync.follow import ODD_DATA
from sync.ledger import Head
from sync.pull import Run, hold_back, take_pull
from sync.replica import Replica
from sync.trust import verified_alone

MOST_TRIES = 3  # refusals of one log that a run answers by asking again
FEWEST_ENTRIES = 1


def waiting(replica: Replica, db: sqlite3.Connection) -> int:
    """Return how many own entries central has not acknowledged."""
    count = 0
    for log in replica.hooks.own_logs(db):
        held, noted = ledger.head(db, log), ledger.acknowledged(db, log)
        count += (held.seq if held else 0) - (noted.seq if noted else 0)
    return count


def ask(replica: Replica, run: Run) -> dict[str, Any]:
    """Return the next request: all own heads, a guess of what central lacks, all cursors."""
    with replica.hooks.reading() as db:
        own = replica.hooks.own_logs(db)
        heads = {log: ledger.head(db, log) for log in own}
        left, size, push = run.most, run.most_bytes, []
        for log in own:
            if log in run.blocked or log in run.fetch or left < 1 or size < 1:
                continue
            first = _first_to_push(db, run, log)
            entries = ledger.read(db, log, first, left, size)
            if entries:
                left -= len(entries)
                size -= sum(len(entry.body) + len(entry.private or b"") for entry in entries)
                push.append({"log": log, "first": first, "entries": wire.pack_all(entries)})
        returned = _give_back(db, run, left if size > 0 else 0)
        have = {scope: _cursors(db, run, scope, own) for scope in replica.hooks.scopes(db)}
        want = {log: _marks(db, log, common) for log, common in run.fetch.items()}
        unsent = list(blobs.waiting(db, own))[: blobs.MOST_NAMED]
    moment = replica.hooks.moment()
    return {
        "proto": wire.PROTO,
        "app": replica.realm.name,
        "now": moment.at,
        "mono": moment.mono,
        "boot": moment.boot,
        "heads": {log: wire.pack_head(place) for log, place in heads.items()},
        "push": push,
        "returned": returned,
        "want": want,
        "have": have,
        "skip": sorted(run.skip),
        "blobs": unsent,
        "keys": 0,
    }


def take(replica: Replica, run: Run, request: Mapping[str, Any], answer: Mapping[str, Any]) -> bool:
    """Act on one answer and say whether anything moved.

    Raises:
        NoContact: The answer is not what central would say; nothing of it was believed.
    """
    said = Answered.read(replica, answer)
    moved = _take_heads(replica, run, said)
    moved |= _take_refusals(run, said)
    moved |= _take_tails(replica, run, said)
    moved |= take_pull(replica, run, request, said)
    run.more = said.more
    moved |= _take_regressed(run, said)
    run.denied |= set(said.denied)
    run.missing = said.missing
    if said.received or said.missing:
        with replica.hooks.transaction() as db:
            blobs.note(db, said.received, said.missing)
    return moved


def done(replica: Replica, run: Run) -> bool:
    """Say whether nothing is left to send, fetch, give back or pull in this run."""
    if run.more or run.returning or set(run.fetch) - run.blocked:
        return False
    with replica.hooks.reading() as db:
        for log in replica.hooks.own_logs(db):
            held, there = ledger.head(db, log), run.at_central.get(log)
            if (
                log not in run.blocked
                and held is not None
                and (there is None or there.seq < held.seq)
            ):
                return False
    return True


def _first_to_push(db: sqlite3.Connection, run: Run, log: str) -> int:
    if log in run.at_central:
        there = run.at_central[log]
        return there.seq + 1 if there else 1
    # Before central has spoken an old acknowledgement is a guess; a wrong one is refused.
    noted = ledger.acknowledged(db, log)
    return noted.seq + 1 if noted else 1


def _marks(db: sqlite3.Connection, log: str, common: Head | None) -> list[dict[str, Any]]:
    """Return places ever further back, by which central finds the last one both sides know."""
    held = ledger.head(db, log)
    places = [] if common is None else [common]
    back = 0
    while held is not None and held.seq - back >= 1:
        hash_ = ledger.hash_at(db, log, held.seq - back)
        if hash_ is not None:
            places.append(Head(held.seq - back, hash_))
        back = back * 2 + 1
    return [wire.pack_head(place) for place in places]


def _cursors(
    db: sqlite3.Connection, run: Run, scope: str, own: list[str]
) -> dict[str, dict[str, Any]]:
    """Return how far one scope was got, log by log, with the sum of what is held up to there."""
    found: dict[str, dict[str, Any]] = {}
    for log, place in ledger.cursors(db, scope).items():
        if log in own:
            continue
        if log not in run.returned:
            sum_ = ledger.gist(db, scope, log, place)
            found[log] = {**wire.pack_head(place), "gist": sum_}
        elif (scope, log) in run.again:  # it is being pulled once more from its beginning
            found[log] = wire.pack_head(run.again[scope, log])
    return found


def _give_back(db: sqlite3.Connection, run: Run, left: int) -> list[dict[str, Any]]:
    run.sent_back = {}
    pieces = []
    for log, after in run.returning.items():
        entries = ledger.borrowed_of(db, log, after, left)
        size = 0
        for count, entry in enumerate(entries):
            size += len(entry.body) + len(entry.private or b"")
            if count and size > run.most_bytes:
                entries = entries[:count]
                break
        left -= len(entries)
        run.sent_back[log] = entries
        if entries:
            pieces.append({"log": log, "entries": wire.pack_all(entries)})
        if left < 1:
            break
    return pieces


def _take_heads(replica: Replica, run: Run, said: Answered) -> bool:
    with replica.hooks.reading() as db:
        own = [log for log in replica.hooks.own_logs(db) if log in said.heads]
        views = [View.of(db, log, said.heads[log], said.notes.get(log)) for log in own]
    moved = False
    for view in views:
        moved |= view.log not in run.at_central or run.at_central[view.log] != view.there
        run.at_central[view.log] = view.there
        if view.why is None:
            run.fetch.pop(view.log, None)
        elif view.log not in run.fetch:
            run.fetch[view.log] = None
            moved = True
    if any(view.changes for view in views):
        with replica.hooks.transaction() as db:
            for view in views:
                _settle(replica, run, db, view)
        moved = True
    return moved


def _settle(replica: Replica, run: Run, db: sqlite3.Connection, view: View) -> None:
    before = 0 if view.old is None or view.fell else view.old.seq
    if view.fell:
        ledger.drop_acknowledgement(db, view.log)
    if view.shorter:
        run.regressed.add(view.log)
    if view.note is not None:
        ledger.keep_acknowledgement(db, view.note)
        run.pushed += max(0, view.note.seq - before)
    if view.why is not None and replica.hooks.own_logs(db)[-1] == view.log:
        # At once, before anything is fetched: nothing more may be appended to a doubtful log.
        replica.hooks.open_log(db, view.why)


def _take_refusals(run: Run, said: Answered) -> bool:
    moved = False
    for refusal in said.refused:
        log = refusal["log"]
        run.tries[log] = run.tries.get(log, 0) + 1
        # A gap or fork is answered by the heads of this answer; anything else waits for people.
        if refusal["why"] in ("gap", "fork") and run.tries[log] < MOST_TRIES:
            moved = True
        elif log not in run.blocked:
            run.blocked.add(log)
            run.refused.append(refusal)
            moved = True
    return moved


def _take_tails(replica: Replica, run: Run, said: Answered) -> bool:
    moved = False
    for log, sent in said.tails:
        if log not in run.fetch:
            continue
        try:
            with replica.hooks.reading() as db:
                entries = [
                    verified_alone(replica, db, wire.unpack(replica.realm, one)) for one in sent
                ]
            outcome = adopt(replica, log, entries)
        except (BadEntry, Unwritable, *ODD_DATA) as fault:
            hold_back(run, log, fault)
            continue
        run.carried += outcome.carried
        run.pulled += outcome.fresh
        moved |= (
            outcome.fresh > 0 or outcome.carried > 0 or outcome.common not in (None, run.fetch[log])
        )
        run.fetch[log] = outcome.common or run.fetch[log]
    return moved


def _take_regressed(run: Run, said: Answered) -> bool:
    moved = False
    for log, sent in run.sent_back.items():
        moved = True
        if sent:
            run.returning[log] = (sent[-1].seq, sent[-1].hash)
            continue
        # All of it was given back: now it is pulled again, from its beginning.
        run.returning.pop(log)
        run.returned.add(log)
        run.more = True
    for log in said.regressed:
        run.regressed.add(log)
        if log not in run.returning and log not in run.returned:
            run.returning[log] = (0, b"")
            moved = True
    return moved
