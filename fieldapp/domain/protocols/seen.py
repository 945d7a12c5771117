"""What is recorded of one visit, gathered in one pass over its facts."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

from fieldapp.domain.bottles import in_order
from fieldapp.domain.facts import (
    BottleFilled,
    BottleIssued,
    BottleSet,
    DeviationStated,
    Done,
    DrawPoured,
    Fact,
    OccupantAgreed,
    QuestionAnswered,
    RunEnded,
    RunStarted,
    StandStarted,
    TapClosed,
    TapOpened,
    VisitClosed,
    VisitLeft,
    VisitOpened,
    VisitResumed,
    VisitSigned,
    WaterUsed,
)
from fieldapp.domain.protocols.steps import CONSENT
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.stand import Mark

CLOCKS_APART = timedelta(minutes=10)
"""Clocks of two devices may be apart so far before an answer to one is asked for again on the
other. Our choice; it excuses nothing, for a draw is judged by its times alone."""
AGREED, REFUSED = "agreed", "refused"


@dataclass(frozen=True, slots=True)
class Noted:
    """One fact with its place in the order of recording and the time it was done.

    ``mark`` is the reading of the device at the press, None where the time was stated; ``sure``
    is False for a correction that does not bring the time of what it corrects.
    """

    position: int
    at: datetime
    mark: Mark | None
    sure: bool
    entry: Recorded

    @property
    def fact(self) -> Any:
        """The fact itself."""
        return self.entry.fact

    @property
    def order(self) -> tuple[datetime, int]:
        """By when it was done, then by when it was recorded."""
        return self.at, self.position


@dataclass(frozen=True, slots=True)
class Use:
    """Water ran; ``earliest`` is None where nobody can say since when it stands."""

    position: int
    earliest: datetime | None
    latest: datetime
    mark: Mark | None
    basis: str  # stated, metered, pressed
    hash: str
    draws: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True)
class Answer:
    """One answer to one question; position -1 and no hash where the plan gave it."""

    position: int
    question: str
    answer: str
    hash: str = ""


class Seen:
    """The facts of a visit, sorted into what the stations ask for."""

    def __init__(self, recorded: Iterable[Recorded], visit: str) -> None:
        self.answered: list[Answer] = []
        self.uses: list[Use] = []
        self.sets: dict[int, list[Noted]] = {}
        self.fills: dict[int, list[Noted]] = {}
        self.taps: dict[int, list[Noted]] = {}
        self.runs: dict[str, list[Noted]] = {}
        self.issued: dict[str, BottleIssued] = {}
        self.stated: list[Noted] = []
        self.signed: set[str] = set()
        self.begun = self.use_stated = False
        self.comings: list[Noted] = []
        self.shut: Noted | None = None
        self.closed: Noted | None = None
        # a correction stands where the entry stood that it corrects
        self.entries = in_order({one.hash: one.in_place() for one in recorded}.values())
        for position, entry in enumerate(self.entries):
            self._take(entry, position, visit)

    @property
    def left(self) -> bool:
        """The visit was left and not resumed.

        Who resumes has seen that it was left, so a leaving is answered by a resuming though the
        clock of another device puts that first.
        """
        if not self.comings or not isinstance(self.comings[-1].fact, VisitLeft):
            return False
        kinds = [type(one.fact) for one in self.comings]
        return kinds.count(VisitLeft) > kinds.count(VisitResumed)

    def since(self, position: int, earlier: int, bound: timedelta) -> bool:
        """Say whether an entry was recorded after an earlier one, or may have been.

        Within a log its order says so; between devices only clocks do, and they may be apart.
        """
        if earlier < 0 or position < 0:
            return position > earlier
        one, other = self.entries[position], self.entries[earlier]
        if one.log == other.log:
            return one.seq > other.seq
        return one.at > other.at - max(bound, CLOCKS_APART)

    def in_force(self, given: Iterable[Answer]) -> dict[str, Answer]:
        """Return the answer that holds for each question: the last one recorded."""
        return {one.question: one for one in (*given, *self.answered)}

    def filled(self, draw: int) -> Noted | None:
        """Return the filling of a draw, of several the one done first."""
        return min(self.fills.get(draw, ()), key=lambda one: one.order, default=None)

    def opened(self, draws: Iterable[int]) -> list[Noted]:
        """Return each opening of the tap for one of those draws, once, in order."""
        return self._taps(draws, TapOpened)

    def closings(self, draws: Iterable[int]) -> list[Noted]:
        """Return each closing of the tap after one of those draws, once, in order."""
        return self._taps(draws, TapClosed)

    def began(self, draws: tuple[int, ...]) -> Noted | None:
        """Return the fact with which drawing these began."""
        fills = [one for one in map(self.filled, draws) if one]
        return min((*fills, *self.opened(draws)), key=lambda one: one.order, default=None)

    def _taps(self, draws: Iterable[int], kind: type[Fact]) -> list[Noted]:
        found = {
            one.position: one
            for draw in draws
            for one in self.taps.get(draw, ())
            if isinstance(one.fact, kind)
        }
        return [found[position] for position in sorted(found)]

    def _take(self, entry: Recorded, position: int, visit: str) -> None:
        if isinstance(entry.fact, BottleIssued):
            self.issued[entry.fact.bottle] = entry.fact
        take = TAKES.get(type(entry.fact))
        if take is None or getattr(entry.fact, "visit", visit) != visit:
            return
        self.begun = True
        take(self, noted(entry, position))

    def _come(self, one: Noted) -> None:
        self.comings.append(one)

    def _close(self, one: Noted) -> None:
        self.closed = self.closed or one

    def _agree(self, one: Noted) -> None:
        answer = REFUSED if one.fact.how == REFUSED else AGREED
        self.answered.append(Answer(one.position, CONSENT, answer, one.entry.hash))

    def _answer(self, one: Noted) -> None:
        given = one.fact
        self.answered.append(Answer(one.position, given.question, given.answer, one.entry.hash))

    def _use(self, one: Noted) -> None:
        given = one.fact
        self.use_stated = True
        earliest, latest = moment(given.from_), moment(given.to)
        unknown = given.exact == "unknown"
        basis = "metered" if given.known_by == "metered" else "stated"
        self.uses.append(
            Use(
                one.position,
                None if unknown else earliest,
                latest or one.at,
                None,
                basis,
                one.entry.hash,
            )
        )

    def _pressed_use(self, one: Noted, draws: tuple[int, ...] = ()) -> None:
        use = Use(one.position, one.at, one.at, one.mark, "pressed", one.entry.hash, draws)
        self.uses.append(use)

    def _shut(self, one: Noted) -> None:
        self.shut = self.shut or one
        self._pressed_use(one)

    def _run(self, one: Noted) -> None:
        self.runs.setdefault(one.fact.step, []).append(one)
        self._pressed_use(one)

    def _set(self, one: Noted) -> None:
        self.sets.setdefault(one.fact.draw, []).append(one)

    def _tap(self, one: Noted) -> None:
        for draw in one.fact.draws:
            self.taps.setdefault(draw, []).append(one)
        self._pressed_use(one, tuple(one.fact.draws))

    def _fill(self, one: Noted) -> None:
        self.fills.setdefault(one.fact.draw, []).append(one)
        if not getattr(one.fact, "water_lot", ""):
            self._pressed_use(one, (one.fact.draw,))

    def _state(self, one: Noted) -> None:
        self.stated.append(one)

    def _sign(self, one: Noted) -> None:
        self.signed.add(one.fact.who)


TAKES: dict[type[Fact], Callable[[Seen, Noted], None]] = {
    VisitOpened: Seen._come,
    VisitLeft: Seen._come,
    VisitResumed: Seen._come,
    VisitClosed: Seen._close,
    OccupantAgreed: Seen._agree,
    QuestionAnswered: Seen._answer,
    WaterUsed: Seen._use,
    StandStarted: Seen._shut,
    RunStarted: Seen._run,
    RunEnded: Seen._run,
    BottleSet: Seen._set,
    TapOpened: Seen._tap,
    TapClosed: Seen._tap,
    BottleFilled: Seen._fill,
    DrawPoured: Seen._fill,
    DeviationStated: Seen._state,
    VisitSigned: Seen._sign,
}


def noted(entry: Recorded, position: int) -> Noted:
    """Return the fact with its time; one whose stated time cannot be read counts as pressed."""
    stated = moment(entry.fact.done_at) if isinstance(entry.fact, Done) else None
    # a correction that brings the time of the press along was read by that press's clock
    kept = entry.stands_for is not None and stated == entry.at
    pressed = kept or not (stated or entry.replaces)
    mark = Mark(entry.at, entry.mono, entry.boot) if pressed else None
    sure = stated is not None or not entry.replaces
    return Noted(position, stated or entry.at, mark, sure, entry)


def moment(text: str) -> datetime | None:
    """Return the moment of a UTC text, None where there is none or it cannot be read."""
    try:
        at = datetime.fromisoformat(text)
    except ValueError:
        return None
    return at.astimezone(UTC) if at.utcoffset() is not None else None
