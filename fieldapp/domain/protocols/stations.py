"""The stations of one visit: the protocol's steps as this visit walks them.

Fills that run on are one station (R2), what the round answered already is none, and the plan may
add a field blank (R40) or a duplicate after the protocol's own fills.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

from fieldapp.domain.facts import VisitPlanned
from fieldapp.domain.protocols.model import Protocol
from fieldapp.domain.protocols.steps import (
    LAST_USE,
    Ask,
    Fill,
    Look,
    Run,
    Sign,
    StandRule,
    StandWait,
    Step,
)

BLANK = "blank"
DIFFERENT = "different"


@dataclass(frozen=True, slots=True)
class Question:
    """One question, or one look."""

    step: Ask


@dataclass(frozen=True, slots=True)
class Waste:
    """Water to waste. ``before`` holds the draws of the next fills, which end its turn."""

    step: Run
    before: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Filling:
    """One fill, or several that run on, and the stand that must come before."""

    fills: tuple[Fill, ...]
    rule: StandRule | None = None
    wait: str = ""  # id of the step in which the stand is waited for
    here: bool = False  # the stand is inside the visit, not before it

    @property
    def draws(self) -> tuple[int, ...]:
        """The draws in the order in which they are filled."""
        return tuple(fill.draw for fill in self.fills)

    @property
    def kept(self) -> tuple[int, ...]:
        """The draws of it that go into a bottle."""
        return tuple(fill.draw for fill in self.fills if fill.keep)

    @property
    def blank(self) -> bool:
        """Water brought along, not the tap's."""
        return self.fills[0].kind == BLANK


@dataclass(frozen=True, slots=True)
class Signature:
    """A name to sign with."""

    step: Sign


Station = Question | Waste | Filling | Signature


def stations(
    protocol: Protocol, plan: VisitPlanned, preset: Iterable[str], *, keep_poured: bool
) -> tuple[Station, ...]:
    """Return the stations of the visit in their order."""
    known = set(preset) - {LAST_USE}
    before: list[Station] = []
    after: list[Station] = []
    rule, wait, here = protocol.stand, "stand", False
    for steps in _runs(protocol.steps):
        first = steps[0]
        if isinstance(first, StandWait):
            rule, wait, here = _rule_of(first), first.id, True
        elif isinstance(first, Fill):
            fills = [step for step in steps if isinstance(step, Fill)]
            kept = tuple(replace(fill, keep=fill.keep or keep_poured) for fill in fills)
            # what stands between two fills comes before the second, what follows the last after
            before += [*after, Filling(kept, rule, wait if rule else "", here)]
            after, rule = [], None
        else:
            station = _single(first)
            if station and not (isinstance(station, Question) and station.step.question in known):
                after.append(station)
    extra = [Filling((fill,)) for fill in _extras(protocol, plan)]
    return _with_ends([*before, *extra, *after])


def asks(protocol: Protocol) -> dict[str, Ask]:
    """Return the questions and looks of the document by the name of what they ask."""
    found = [_as_question(one) if isinstance(one, Look) else one for one in protocol.steps]
    return {one.question: one for one in found if isinstance(one, Ask)}


def _runs(steps: Sequence[Step]) -> list[list[Step]]:
    """Put fills that run on beside the fill they follow."""
    found: list[list[Step]] = []
    for step in steps:
        if isinstance(step, Fill) and step.running_on and found:
            found[-1].append(step)
        else:
            found.append([step])
    return found


def _single(step: Step) -> Station | None:
    if isinstance(step, Ask):
        return Question(step)
    if isinstance(step, Look):
        return Question(_as_question(step))
    if isinstance(step, Run):
        return Waste(step, ())
    if isinstance(step, Sign):
        return Signature(step)
    return None  # a reading or a photo: Protocol.beyond() names it


def _as_question(look: Look) -> Ask:
    return Ask(
        id=look.id,
        why=look.why,
        source=look.source,
        breach=look.breach,
        question=look.at,
        says=look.says,
        answers=(look.expect, DIFFERENT),
        deviates={DIFFERENT: "not-as-expected"},
    )


def _rule_of(wait: StandWait) -> StandRule:
    return StandRule(
        minimum=wait.minimum,
        question_above=wait.maximum,
        breach=wait.breach,
        why=wait.why,
        source=wait.source,
        question_source=wait.source,
    )


def _extras(protocol: Protocol, plan: VisitPlanned) -> list[Fill]:
    """Return the planned draws that are not the protocol's own: blanks and duplicates."""
    own = protocol.draws()
    numbers = {draw.draw for draw in own}
    planned: dict[int, Mapping[str, object]] = {int(one["draw"]): one for one in plan.draws}
    made = []
    for number, one in sorted(planned.items()):
        if number in numbers:
            continue
        kind = str(one.get("kind", "")) or "duplicate"
        analyse = protocol.analytes if kind == BLANK else own[0].analyse
        step = BLANK if kind == BLANK else f"extra-{number}"
        made.append(
            Fill(id=step, draw=number, volume_ml=own[0].volume_ml, kind=kind, analyse=analyse)
        )
    # the tap's own water first, then the blank
    return sorted(made, key=lambda fill: fill.kind == BLANK)


def _with_ends(found: Sequence[Station]) -> tuple[Station, ...]:
    """Tell each run to waste which draws follow it: once these are drawn its turn is over."""
    made: list[Station] = []
    draws: tuple[int, ...] = ()
    for station in reversed(found):
        if isinstance(station, Filling) and not station.blank:
            draws = station.draws
        made.append(replace(station, before=draws) if isinstance(station, Waste) else station)
    return tuple(reversed(made))
