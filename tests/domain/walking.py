"""A kitchen on paper: a clock that is set by hand and the facts recorded by it, for the tests."""

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from typing import Any

from fieldapp.domain import facts
from fieldapp.domain.protocols import Protocol, find
from fieldapp.domain.protocols.standing import Due, Standing
from fieldapp.domain.protocols.where import where
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc

VISIT = "V-1"
PAIR = ((1, "compliance"), (5, "compliance"))


def utc(text: str) -> datetime:
    """Return the instant of ``2027-05-04 12:00``, in UTC."""
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


@dataclass
class Kitchen:
    """One visit, one tablet; ``wait`` moves its clock, ``obey`` does what is due."""

    name: str = "first-litre"
    draws: tuple[tuple[Any, ...], ...] = ((1, "compliance"),)
    at: datetime = field(default_factory=lambda: utc("2027-05-04 12:00"))
    options: dict[str, Any] = field(default_factory=dict)
    answers: dict[str, Any] | None = None
    document: Protocol | None = None
    last_use: timedelta = timedelta(hours=8)
    log: str = "log-a"
    boot: str = "boot-1"
    skew: timedelta = timedelta(0)
    mono: int = 5_000_000
    entries: list[Recorded] = field(default_factory=list)
    heads: dict[str, int] = field(default_factory=dict)
    bottles: Callable[[int], str] = lambda draw: f"BOTTLE-{draw}"

    @property
    def protocol(self) -> Protocol:
        return self.document or find(self.name)

    @property
    def plan(self) -> facts.VisitPlanned:
        keys = ("draw", "purpose", "kind")
        draws = tuple(dict(zip(keys, one, strict=False)) for one in self.draws)
        return facts.VisitPlanned(
            visit=VISIT, round="R-1", route="T-1", site="S-1", tap="kitchen", protocol=self.name,
            sha256=self.protocol.sha256, draws=draws, answers=self.answers,
        )  # fmt: skip

    @property
    def now(self) -> Reading:
        return Reading(self.at, 0, self.mono, self.boot)

    def wait(self, **length: float) -> "Kitchen":
        """Let time pass on the wall and on the counter."""
        passed = timedelta(**length)
        self.at += passed
        self.mono += round(passed / timedelta(milliseconds=1))
        return self

    def restart(self) -> "Kitchen":
        """Start the tablet anew: the counter begins at nothing, in another boot."""
        self.boot, self.mono = f"{self.boot}+", 1_000
        return self

    def record(self, kind: type[facts.Fact], /, **fields: Any) -> Recorded:
        """Record a fact of the visit at this moment."""
        return self.put(kind(visit=VISIT, **fields))

    def put(self, fact: facts.Fact, *, log: str = "", replaces: str = "") -> Recorded:
        """Put a fact at the end of a log, of this tablet's own where none is named."""
        log = log or self.log
        seq = self.heads[log] = self.heads.get(log, 0) + 1
        made = Recorded(
            fact, f"{log}:{seq}", log, seq, self.at, 0, self.mono, self.boot, "sampler-1",
            replaces=replaces,
        )  # fmt: skip
        self.entries.append(made)
        return made

    def withdraw(self, entry: Recorded) -> None:
        """Take an entry back: it does not live any more."""
        self.entries.remove(entry)

    def correct(self, entry: Recorded, **changes: Any) -> Recorded:
        """Put other data in the place of an entry; the correction brings the old time along."""
        fact = replace(entry.fact, **{"done_at": format_utc(entry.done_at), **changes})
        self.entries.remove(entry)
        return self.put(fact, replaces=entry.hash)

    def where(self) -> Standing:
        """Ask the engine."""
        return where(self.protocol, self.plan, self.entries, self.now, **self.options)

    @property
    def due(self) -> Due:
        return self.where().due

    def deviations(self) -> list[tuple[str, tuple[int, ...]]]:
        """Return the kinds of the deviations with their draws."""
        return [(one.kind, one.draws) for one in self.where().deviations]

    def kinds(self) -> list[str]:
        """Return the kinds of the deviations."""
        return [one.kind for one in self.where().deviations]

    def used(self, earliest: datetime, latest: datetime | None = None, **fields: Any) -> Recorded:
        """Record a statement of the last use between two instants."""
        given = {"exact": "about", "where": "bath", **fields}
        return self.record(
            facts.WaterUsed, from_=format_utc(earliest), to=format_utc(latest or earliest), **given
        )

    def answer(self, question: str, answer: str) -> Recorded:
        """Record an answer."""
        return self.record(facts.QuestionAnswered, question=question, answer=answer)

    def obey(self, answer: str = "", fill: str = "line") -> str:
        """Do what is due, as an ordinary sampler would, and return its kind."""
        due = self.due
        DEEDS[due.kind](self, due, answer, fill)
        return due.kind

    def until(self, *kinds: str, question: str = "") -> "Kitchen":
        """Do what is due until one of those acts is."""
        for _ in range(40):
            due = self.due
            if due.kind in kinds and question in ("", due.question):
                return self
            self.obey()
        raise AssertionError(f"never due: {kinds} {question}; due is {self.due}")

    def walk(self) -> list[str]:
        """Do what is due to the end; return the kinds of the acts."""
        done = []
        while self.due.kind != "over":
            done.append(self.obey())
            assert len(done) < 60, done
        return done


def _open(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    left = kitchen.where().state == "left"
    kitchen.record(facts.VisitResumed if left else facts.VisitOpened)


def _ask(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    answer = answer or due.answers[0]
    if due.question == "consent":
        how = "refused" if answer == "refused" else "spoken"
        kitchen.record(facts.OccupantAgreed, how=how)
        return
    kitchen.answer(due.question, answer)


def _last_use(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    kitchen.used(kitchen.at - kitchen.last_use)


def _wait(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    if due.until is None:
        kitchen.record(facts.StandStarted)
        return
    kitchen.wait(seconds=max(0.001, (due.until - kitchen.at).total_seconds()))


def _run(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    if due.since is None:
        kitchen.record(facts.RunStarted, step=due.step)
        return
    _wait(kitchen, due, answer, fill)
    kitchen.record(facts.RunEnded, step=due.step)


def _set(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    draw = next(one for one in kitchen.where().draws if one.draw == due.next_draw)
    kitchen.record(
        facts.BottleSet, bottle=kitchen.bottles(draw.draw), draw=draw.draw, kind_=draw.kind,
        purpose=draw.purpose,
    )  # fmt: skip


def _tap(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    kitchen.record(facts.TapOpened, draws=due.draws)


def _fill(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    rail = {one.draw: one for one in kitchen.where().draws}
    kitchen.wait(seconds=12 * len(due.draws))
    if len(due.draws) > 1:
        kitchen.record(facts.TapClosed, draws=due.draws)
    for draw in due.draws:
        if not rail[draw].keep:
            kitchen.record(facts.DrawPoured, draw=draw, fill=fill)
            continue
        lot = "LOT-7" if due.kind == "blank" else ""
        kitchen.record(
            facts.BottleFilled, bottle=rail[draw].bottle, draw=draw, fill=fill, water_lot=lot
        )


def _sign(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    kitchen.record(facts.VisitSigned, who=due.who, how="typed")


def _close(kitchen: Kitchen, due: Due, answer: str, fill: str) -> None:
    kitchen.record(facts.VisitClosed, outcome=kitchen.where().stopped or "done")


DEEDS: dict[str, Callable[[Kitchen, Due, str, str], None]] = {
    "open": _open,
    "ask": _ask,
    "last-use": _last_use,
    "wait": _wait,
    "run": _run,
    "set": _set,
    "tap": _tap,
    "fill": _fill,
    "blank": _fill,
    "sign": _sign,
    "close": _close,
}
