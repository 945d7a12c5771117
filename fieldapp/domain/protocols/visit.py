"""One visit as the engine looks at it: its stations, what is recorded, and the reading now."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

from fieldapp.domain.facts import RunStarted, TapOpened, VisitPlanned
from fieldapp.domain.protocols.model import Protocol
from fieldapp.domain.protocols.seen import Answer, Noted, Seen, Use
from fieldapp.domain.protocols.stations import Filling, Question, Station, Waste, asks, stations
from fieldapp.domain.protocols.steps import Ask, Run
from fieldapp.domain.protocols.stood import Stood, Uses
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.stand import Mark, between

ANOTHER_DAY = "another-day"
STAND_DOUBT, STAND_LONG = "stand-doubt", "stand-long"
WAIT, DRAW_NOW = "wait", "draw-now"


@dataclass(frozen=True, slots=True)
class Visit:
    """What ``where`` hands from one of its parts to the next; made once, changed by none."""

    protocol: Protocol
    stations: tuple[Station, ...]
    asks: Mapping[str, Ask]  # every question of the document, those the round answered too
    seen: Seen
    given: tuple[Answer, ...]
    answers: Mapping[str, Answer]
    purposes: Mapping[int, str]
    visit: str
    now: Reading
    bound: timedelta

    @property
    def fillings(self) -> list[Filling]:
        """The stations at which something is filled, in order."""
        return [station for station in self.stations if isinstance(station, Filling)]

    @property
    def kept(self) -> tuple[int, ...]:
        """The draws of the tap's own water that go into bottles."""
        return tuple(n for one in self.fillings if not one.blank for n in one.kept)

    @property
    def questions(self) -> dict[str, Question]:
        """The questions of the visit by their name."""
        return {one.step.question: one for one in self.stations if isinstance(one, Question)}

    def outcome(self, given: Answer) -> str:
        """Return the outcome with which an answer ends the visit, empty if it does not."""
        if given.question == STAND_LONG:
            return ANOTHER_DAY if given.answer == ANOTHER_DAY else ""
        ask = self.asks.get(given.question)
        return ask.stops_if.get(given.answer, "") if ask else ""

    def last_use_told(self) -> bool:
        """Say whether somebody stated the last use, or pressed before any draw that it is now."""
        if self.seen.use_stated or self.seen.shut is None:
            return self.seen.use_stated
        began = self.seen.began(tuple(n for one in self.fillings for n in one.draws))
        return began is None or self.seen.shut.position < began.position

    def stood(self, filling: Filling) -> Stood | None:
        """Return the stand before those draws as it is known now, what was told late included."""
        told = self.stands_told(filling)
        return told[-1] if told else None

    def stands_told(self, filling: Filling) -> list[Stood]:
        """Return the stand as believed at the draw, then after each use told later.

        Before the draw there is one at most, and it ends now.
        """
        began = self.seen.began(filling.draws)
        others = [use for use in self.seen.uses if not set(use.draws) & set(filling.draws)]
        uses = Uses()
        if began is None:
            for use in others:
                uses.add(use)
            mark = Mark(self.now.at, self.now.mono, self.now.boot)
            return _some(uses.stood(self.now.at, mark, self.bound))
        for use in others:
            if use.position < began.position and not _after(use, began):
                uses.add(use)
        for use in self._left_open(filling, began):
            uses.add(use)
        found = _some(uses.stood(began.at, began.mark, self.bound))
        for use in _told_late(others, began):
            uses.add(use)
            found += _some(uses.stood(began.at, began.mark, self.bound))
        return found

    def excused(self, kinds: Sequence[str], steps: Sequence[str], after: int) -> bool:
        """Say whether a person stated one of those deviations for such a step since then."""
        return any(
            one.position > after and one.fact.deviation in kinds and one.fact.step in (*steps, "")
            for one in self.seen.stated
        )

    def answered_since(self, question: str, position: int) -> str:
        """Return the answer in force, empty if it was given before that position."""
        found = self.answers.get(question)
        since = found is not None and self.seen.since(found.position, position, self.bound)
        return found.answer if found and since else ""

    def _left_open(self, filling: Filling, began: Noted) -> Iterable[Use]:
        """Return the runs to waste before a draw of which nobody said that the tap was shut.

        It was shut at some time until the draw, so how long the water stood is not known.
        """
        for waste in self.wastes(filling):
            started = self.running_since(waste.step, began)
            if started:
                name = started.entry.hash
                yield Use(started.position, started.at, began.at, None, "stated", name)

    def wastes(self, filling: Filling) -> list[Waste]:
        """Return the runs to waste that come before those draws."""
        found = (one for one in self.stations if isinstance(one, Waste))
        return [one for one in found if one.before == filling.draws]

    def running_since(self, step: Run, before: Noted | None = None) -> Noted | None:
        """Return the opening of the tap to waste that no closing has answered."""
        runs = sorted(self.seen.runs.get(step.id, ()), key=lambda one: one.order)
        runs = [one for one in runs if before is None or one.order <= before.order]
        return runs[-1] if runs and isinstance(runs[-1].fact, RunStarted) else None

    def ran(self, started: Noted) -> timedelta:
        """Return how long water has run to waste by now, at the least."""
        return _lasted(started, self.now.at, Mark(self.now.at, self.now.mono, self.now.boot))

    def ran_enough(self, step: Run, before: Noted | None) -> bool:
        """Say whether the water ran to waste long enough before that fact."""
        started: Noted | None = None
        for one in sorted(self.seen.runs.get(step.id, ()), key=lambda one: one.order):
            if before and one.order > before.order:
                break
            if isinstance(one.fact, RunStarted):
                started = one
            elif started and _lasted(started, one.at, one.mark) >= step.minimum:
                return True
        return False


def visit_of(
    protocol: Protocol,
    plan: VisitPlanned,
    recorded: Sequence[Recorded],
    now: Reading,
    *,
    keep_poured: bool,
    offset_bound: timedelta,
    preset: Mapping[str, str],
) -> Visit:
    """Lay out the visit's stations and gather what is recorded of it."""
    planned = {**preset, **{name: str(one) for name, one in (plan.answers or {}).items()}}
    given = tuple(Answer(-1, name, answer) for name, answer in planned.items())
    seen = Seen(recorded, plan.visit)
    return Visit(
        protocol=protocol,
        stations=stations(protocol, plan, planned, keep_poured=keep_poured),
        asks=asks(protocol),
        seen=seen,
        given=given,
        answers=seen.in_force(given),
        purposes={int(one["draw"]): str(one.get("purpose", "")) for one in plan.draws},
        visit=plan.visit,
        now=now,
        bound=offset_bound,
    )


def running(visit: Visit, draw: int) -> bool:
    """Say whether the tap was opened for that draw and not closed since."""
    taps = visit.seen.taps.get(draw, [])
    return bool(taps) and isinstance(taps[-1].fact, TapOpened)


def over(visit: Visit, waste: Waste) -> bool:
    """Say whether water need not run to waste any more."""
    if visit.seen.began(waste.before) is not None:
        return True
    if visit.running_since(waste.step):
        return False  # the tap is open: first it is shut
    excused = visit.excused(("run-short",), (waste.step.id,), -1)
    return excused or visit.ran_enough(waste.step, None)


def flushed(visit: Visit, filling: Filling) -> bool:
    """Say whether no water need run to waste any more before those draws."""
    return all(over(visit, one) for one in visit.wastes(filling))


def _after(use: Use, began: Noted) -> bool:
    """Say whether water ran only after a draw whose time was stated.

    Of a draw that was pressed, a use told before it cannot be later: that is a contradiction.
    """
    return began.mark is None and use.earliest is not None and use.earliest > began.at


def _told_late(uses: Sequence[Use], began: Noted) -> list[Use]:
    """Return what people told after the draw about water that ran before it."""
    return [
        replace(use, latest=min(use.latest, began.at))
        for use in uses
        if use.position > began.position
        and use.basis != "pressed"
        and (use.earliest is None or use.earliest < began.at)
    ]


def _lasted(start: Noted, at: datetime, mark: Mark | None) -> timedelta:
    """Return how long it is from a fact to a moment, at the least."""
    if start.mark and mark:
        return between(start.mark, mark).shortest
    return at - start.at


def _some(stood: Stood | None) -> list[Stood]:
    return [stood] if stood else []
