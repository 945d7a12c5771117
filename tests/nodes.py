"""Nodes for tests: a clock that is set by hand, a store with a plan, and a day worked at two."""

import base64
import json
import sqlite3
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from fieldapp import identity, nodes, work
from fieldapp.commands import bench, desk, drawing, kitchen, last_use
from fieldapp.domain.facts import (
    BottleFilled,
    EntryCorrected,
    EntryWithdrawn,
    Fact,
    ResultReported,
)
from fieldapp.domain.protocols.standing import Due
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.places import shipped
from fieldapp.projections.tables import TABLES
from fieldapp.store import Answer, Store
from fieldapp.work.devices import take_invite
from sync import exchange, ledger
from sync.endpoint import Endpoint
from sync.entry import Entry
from sync.peer import LoopbackPeer

SHIPPED = shipped("demo_routes") / "clean-day.json"
ROUND, ROUTE, LABORATORY = "quillhaven-2027-05", "R-0504", "fennimoor"
SAMPLER, CLERK, COORDINATOR = "sampler-1", "clerk-1", "coordinator-1"
MORNING = datetime(2027, 5, 4, 11, 40, tzinfo=UTC)
"""05:40 by the clocks of the shipped round."""


class HandClock:
    """A clock that tests set by hand; ``scripted`` is false, so its node passes for a real one."""

    scripted = False

    def __init__(self, at: datetime = MORNING) -> None:
        self.at, self.mono, self.boot = at, 5_000_000, "boot-1"

    def read(self) -> Reading:
        """Return this moment: UTC, six hours west."""
        return Reading(self.at, -360, self.mono, self.boot)

    def wait(self, **length: float) -> None:
        """Let time pass on the wall and on the counter."""
        passed = timedelta(**length)
        self.at += passed
        self.mono += round(passed / timedelta(milliseconds=1))


def press(
    store: Store,
    *facts: Fact,
    act: str = "",
    fields: Mapping[str, Any] | None = None,
    by: str = SAMPLER,
) -> Answer:
    """Record facts by one press, as a form would."""
    return store.act(
        act or identity.new_act(), fields or {}, lambda _pages, _reading: list(facts), by=by
    )


def import_shipped(store: Store, file: Path = SHIPPED) -> None:
    """Import the shipped round."""
    data = base64.b64encode(file.read_bytes()).decode()
    work.do(store, "round-import", {"file": file.name, "data": data, "amend": False}, work.quiet)


def issue(store: Store, spare: int = 0) -> list[str]:
    """Print the labels of the shipped route and return the codes on them."""
    asked = {"route": ROUTE, "spare": spare}
    return list(work.do(store, "labels", asked, work.quiet)["codes"])


def private_words(file: Path = SHIPPED) -> list[str]:
    """Return every private text of a round file: names, addresses, phones, contacts, access."""
    read = json.loads(file.read_text("utf-8"))
    keys = ("name", "address", "phone", "contact", "access")
    return [one[key] for one in (*read["people"], *read["sites"]) for key in keys if key in one]


def bodies(store: Store) -> list[dict[str, Any]]:
    """Return the body of every entry held whole, log by log."""
    with store.reader() as db:
        rows = db.execute("SELECT body FROM entry ORDER BY log, seq").fetchall()
    return [json.loads(row[0]) for row in rows]


def last_entry(db: sqlite3.Connection, log: str) -> Entry:
    """Return the last entry of a log."""
    head = ledger.head(db, log)
    assert head is not None
    return ledger.read(db, log, head.seq, 1)[0]


def page_tables(store: Store) -> dict[str, list[tuple[Any, ...]]]:
    """Return the rows of all page tables of a store, in no order."""
    with store.reader() as db:
        return tables_in(db)


def tables_in(db: sqlite3.Connection) -> dict[str, list[tuple[Any, ...]]]:
    """Return the rows of all page tables, in no order."""
    return {
        table: sorted(db.execute(f"SELECT {', '.join(columns)} FROM {table}"), key=repr)
        for table, (columns, _) in TABLES.items()
    }


def everything(store: Store) -> dict[str, list[tuple[Any, ...]]]:
    """Return every row of every table, for a look before and after."""
    with store.reader() as db:
        names = db.execute("SELECT name FROM sqlite_master WHERE type = 'table' ORDER BY 1")
        return {
            name: sorted(db.execute(f"SELECT * FROM {name}"), key=repr)
            for (name,) in names.fetchall()
        }


def count(store: Store) -> int:
    """Return how many entries are held whole."""
    with store.reader() as db:
        return int(db.execute("SELECT COUNT(*) FROM entry").fetchone()[0])


@dataclass
class Pair:
    """A central and a tablet enrolled at it, joined by a line in the process."""

    central: Store
    tablet: Store
    clock: HandClock

    def close(self) -> None:
        """Close both nodes."""
        self.tablet.close()
        self.central.close()

    @property
    def line(self) -> LoopbackPeer:
        """The line from the tablet to central."""
        return LoopbackPeer(Endpoint(self.central.replica()), self.central.realm)

    def exchange(self) -> None:
        """Send and fetch until nothing is left either way."""
        report = exchange.run(self.tablet.replica(), self.line)
        assert not report.refused, report.refused
        assert report.waiting == 0

    def enrol(self) -> None:
        """Enrol the tablet as the sampler's."""
        invite = work.do(self.central, "invite", {"person": SAMPLER}, work.quiet)
        self.central.enrolling = lambda dev, key, code: take_invite(self.central, dev, key, code)
        key = self.tablet.key
        code = invite["code"].replace("-", "")
        answer = exchange.enrol(self.line, self.tablet.realm, key, self.tablet.dev, code)
        pin = {"url": "loopback:", "dev": self.central.dev, "public_key": answer["public_key"]}
        identity.pin_central(self.tablet.folder, pin)


def make_pair(folder: Path) -> Pair:
    """Return a central with the shipped plan and labels, and the sampler's tablet beside it."""
    clock = HandClock()
    central = Store.open(folder / "central", clock)
    nodes.become_central(central)
    import_shipped(central)
    issue(central, spare=2)
    pair = Pair(central, Store.open(folder / "tablet", clock), clock)
    pair.enrol()
    pair.exchange()
    return pair


def obey(pair: Pair, visit: str) -> str:
    """Do at the tablet what is due in a visit, as an ordinary sampler would; return its kind."""
    store, clock = pair.tablet, pair.clock
    clock.wait(seconds=20)
    with store.pages() as pages:
        told = pages.standing(visit, clock.read())
    assert told is not None
    due = told.due
    if due.kind == "wait":
        assert due.until is not None
        clock.wait(seconds=max(1.0, (due.until - clock.at).total_seconds()))
        return due.kind
    store.act(
        identity.new_act(),
        {"visit": visit},
        lambda pages, reading: DEEDS[due.kind](pages, reading, visit, due),
        by=SAMPLER,
    )
    return due.kind


def walk(pair: Pair, visit: str) -> list[str]:
    """Do what is due in a visit to its end; return the kinds of what was done."""
    done: list[str] = []
    while True:
        with pair.tablet.pages() as pages:
            told = pages.standing(visit, pair.clock.read())
        assert told is not None
        if told.due.kind == "over":
            return done
        done.append(obey(pair, visit))
        assert len(done) < 60, done


def _ask(pages: Any, reading: Reading, visit: str, due: Due) -> list[Fact]:
    if due.question == "consent":
        return kitchen.agree(pages, reading, visit, how="spoken", name="Wilhelmet Asterby")
    return kitchen.answer(pages, reading, visit, question=due.question, answer=due.answers[0])


def _last_use(pages: Any, reading: Reading, visit: str, due: Due) -> list[Fact]:
    at = reading.at - timedelta(hours=8)
    return last_use.state_last_use(pages, reading, visit, exact="at", at=at, where="bath")


def _set(pages: Any, reading: Reading, visit: str, due: Due) -> list[Fact]:
    code = _code_for(pages, visit, due.next_draw)
    return drawing.set_bottle(pages, reading, visit, code=code)


def _blank(pages: Any, reading: Reading, visit: str, due: Due) -> list[Fact]:
    code = _code_for(pages, visit, due.next_draw or due.draws[0])
    return drawing.blank(pages, reading, visit, water_lot="LOT-7", code=code)


def _code_for(pages: Any, visit: str, draw: int) -> str:
    held = [b for b in pages.bottles() if b["printed_for"] == visit and b["draw"] == draw]
    return str(held[0]["bottle"])


DEEDS: dict[str, Callable[[Any, Reading, str, Due], list[Fact]]] = {
    "open": lambda pages, reading, visit, due: kitchen.open_visit(pages, reading, visit),
    "ask": _ask,
    "last-use": _last_use,
    "set": _set,
    "tap": lambda pages, reading, visit, due: drawing.open_tap(pages, reading, visit),
    "fill": lambda pages, reading, visit, due: drawing.fill(pages, reading, visit, fills={}),
    "blank": _blank,
    "sign": lambda pages, reading, visit, due: kitchen.sign(
        pages, reading, visit, name="Wrenna Oddquist"
    ),
    "close": lambda pages, reading, visit, due: kitchen.close(pages, reading, visit),
}


def receive(pair: Pair, code: str, number: str) -> Answer:
    """Receive a bottle at central's counter."""
    pair.clock.wait(seconds=5)
    return pair.central.act(
        identity.new_act(),
        {"bottle": code},
        lambda pages, reading: bench.receive(
            pages, reading, bottle=code, laboratory_number=number, counted=False
        ),
        by=CLERK,
    )


def report(pair: Pair, code: str, analyte: str, value: str, number: str = "") -> Answer:
    """Report one result at central."""
    given = ResultReported(
        bottle=code, analyte=analyte, value=value, unit="ug/L", laboratory_number=number
    )
    return press(pair.central, given, by=CLERK)


def latest(store: Store, subject: str, kind: str) -> Recorded:
    """Return the latest entry of a kind about a subject."""
    with store.pages() as pages:
        return [entry for entry in pages.story(subject) if entry.fact.kind == kind][-1]


def work_a_day(pair: Pair) -> None:
    """Work the shipped day at both nodes, with what goes wrong on such a day.

    A filling is corrected twice, a correction and a withdrawal are taken back, a receipt is
    withdrawn and made again, results differ, a bottle is received that nobody here issued, one
    finding is settled twice.
    """
    for visit in ("V-0401", "V-0402", "V-0404", "V-0405"):
        walk(pair, visit)
    obey(pair, "V-0403")
    press(pair.tablet, _half_full(pair, "V-0401", "below"), by=SAMPLER)
    (corrected,) = press(pair.tablet, _half_full(pair, "V-0402", "spilled")).entries
    press(pair.tablet, EntryWithdrawn(of=corrected, reason="it was full"))
    signed = latest(pair.tablet, "visit:V-0405", "visit.signed")
    (unsigned,) = press(pair.tablet, EntryWithdrawn(of=signed.hash, reason="wrong hand")).entries
    press(pair.tablet, EntryWithdrawn(of=unsigned, reason="right hand"))
    pair.exchange()
    pair.clock.wait(hours=2)
    codes = _filled(pair)
    for number, code in enumerate(codes[:-1], 1):
        receive(pair, code, f"W27-{number:04}")
    taken = latest(pair.central, f"bottle:{codes[0]}", "bottle.received")
    press(pair.central, EntryWithdrawn(of=taken.hash, reason="wrong sticker"), by=CLERK)
    receive(pair, codes[0], "W27-0100")
    receive(pair, "00000000000", "W27-0101")
    press(pair.central, _half_full(pair, "V-0401", "over"), by=COORDINATOR)
    for code in codes[:3]:
        report(pair, code, "lead", "3.2")
        report(pair, code, "copper", "120")
    report(pair, codes[1], "lead", "7.9")
    report(pair, codes[-1], "lead", "1.1")
    _settle_twice(pair)
    pair.exchange()


def _filled(pair: Pair) -> list[str]:
    with pair.central.pages() as pages:
        return [b["bottle"] for b in pages.bottles(round_id=ROUND) if b["filled"]]


def _half_full(pair: Pair, visit: str, fill: str) -> EntryCorrected:
    with pair.tablet.pages() as pages:
        story = [e for e in pages.story(f"visit:{visit}") if not e.replaces]
    entry = next(e for e in story if isinstance(e.fact, BottleFilled))
    data = {**entry.fact.data(), "fill": fill}
    return EntryCorrected(of=entry.hash, kind_="bottle.filled", data_=data, reason="looked again")


def _settle_twice(pair: Pair) -> None:
    with pair.central.pages() as pages:
        found = pages.findings(pair.clock.at, round_id=ROUND)[0]
    asked = {"finding": found["finding"], "reason": "seen"}
    given = desk.settle_finding
    facts: list[Fact] = []
    pair.central.act(
        identity.new_act(),
        asked,
        lambda pages, reading: facts.extend(given(pages, reading, **asked)) or facts,
        by=COORDINATOR,
    )
    pair.clock.wait(minutes=1)
    press(pair.central, *facts, by=COORDINATOR)
