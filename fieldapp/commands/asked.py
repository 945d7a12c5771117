"""What every command asks before it answers with facts: where a visit stands and what is due.

A command reads through ``Pages`` of the transaction that will write, so nothing can change between
the question and the entry. It makes no sentences: a broken rule is a kind with values.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any, Protocol

from fieldapp.domain.bottles import in_order
from fieldapp.domain.errors import NotDue, RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import Fact, VisitPlanned
from fieldapp.domain.protocols.standing import Due, Standing
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc, in_utc

AHEAD = timedelta(minutes=2)
"""A stated time may lie this far ahead of the node's clock. Our choice: a watch is set by hand."""


class Asked(Protocol):
    """The pages as far as commands read them."""

    def plan(self, visit: str) -> VisitPlanned | None:
        """Return the plan in force of a visit."""

    def standing(self, visit: str, now: Reading) -> Standing | None:
        """Return where the visit stands."""

    def recorded(self, visit: str, *, gone: bool = False) -> list[Recorded]:
        """Return what is recorded of a visit."""

    def bottle(self, code: str) -> Mapping[str, Any] | None:
        """Return one bottle's summary."""

    def bottles(
        self, *, round_id: str = "", visit: str = "", route: str = ""
    ) -> Sequence[Mapping[str, Any]]:
        """Return the bottles of a visit."""

    def story(self, subject: str) -> list[Recorded]:
        """Return everything recorded about a subject."""

    def fact(self, name: str) -> Recorded | None:
        """Return one entry's fact."""

    def gone(self, names: Sequence[str]) -> Mapping[str, Any]:
        """Return which of those entries were replaced or withdrawn."""


class NoProtocol(RuleBroken):
    """The text of the visit's ``protocol`` has not reached this device."""

    kind = "no-protocol"


class NotYet(RuleBroken):
    """What was stated lies ahead of the node's clock, at ``stated``."""

    kind = "not-yet"


class StrangeAnswer(RuleBroken):
    """``answer`` is none of the answers that the document offers to ``question``."""

    kind = "strange-answer"


class NotStarted(RuleBroken):
    """The visit has not been opened."""

    kind = "not-started"


@dataclass(frozen=True, slots=True)
class When:
    """When a thing was done and on whose word; all empty: now, at the press (R19).

    ``done_at`` is UTC text.
    """

    done_at: str = ""
    basis: str = ""
    told_by: str = ""
    writer: str = ""

    def fields(self) -> dict[str, str]:
        """Return the fields that every fact of a person's doing may hold."""
        return {
            "done_at": self.done_at,
            "basis": self.basis,
            "told_by": self.told_by,
            "writer": self.writer,
        }


NOW = When()


def stated_at(at: datetime, *, told_by: str = "") -> When:
    """Return a time given afterwards, by the person who holds the device or by another."""
    return When(done_at=format_utc(at), basis="stated", told_by=told_by or "sampler")


def check_past(when: When, reading: Reading) -> None:
    """Refuse a stated time that lies ahead: nobody has done it yet.

    Raises:
        NotYet: It does.
    """
    if when.done_at and not_past(datetime.fromisoformat(when.done_at), reading):
        raise NotYet(stated=when.done_at)


def not_past(at: datetime, reading: Reading) -> bool:
    """Say whether a moment lies ahead of the node's clock by more than a watch may."""
    return in_utc(at) > reading.at + AHEAD


def planned(pages: Asked, visit: str) -> VisitPlanned:
    """Return the visit's plan.

    Raises:
        Unknown: This node holds no plan of it.
    """
    plan = pages.plan(visit)
    if plan is None:
        raise Unknown(what="visit", name=visit)
    return plan


def standing_of(pages: Asked, visit: str, reading: Reading) -> Standing:
    """Return where the visit stands.

    Raises:
        Unknown: This node holds no plan of it.
        NoProtocol: Its protocol's text has not arrived.
    """
    plan = planned(pages, visit)
    told = pages.standing(visit, reading)
    if told is None:
        raise NoProtocol(protocol=plan.protocol)
    return told


def due_of(
    pages: Asked, visit: str, reading: Reading, kind: str, *, over: type[Fact], **values: Any
) -> tuple[Standing, Due]:
    """Return the standing and the due act, where that is of the kind asked for.

    ``over`` and ``values`` describe the fact that the act would make: if one stands already, the
    page was old and the step is over.

    Raises:
        StepOver: Such a fact stands.
        NotDue: Another act is due.
    """
    told = standing_of(pages, visit, reading)
    if told.due.kind == kind:
        return told, told.due
    refuse(pages, visit, told, over, **values)
    raise AssertionError("refuse() always raises")


def refuse(pages: Asked, visit: str, told: Standing, over: type[Fact], **values: Any) -> None:
    """Say why an act is not due: it stands already, or another one is.

    Raises:
        StepOver: A fact of that class with those values stands.
        NotDue: None does.
    """
    stands = latest(pages.recorded(visit), over, **values)
    if stands is not None:
        raise StepOver(at=format_utc(stands.at), visit=visit)
    raise NotDue(due=told.due.kind, visit=visit)


def latest(entries: Sequence[Recorded], kind: type[Fact], **values: Any) -> Recorded | None:
    """Return the latest entry of that class whose fact holds those values."""
    found = [
        entry
        for entry in in_order(entries)
        if isinstance(entry.fact, kind)
        and all(getattr(entry.fact, name) == value for name, value in values.items())
    ]
    return found[-1] if found else None


def one_of(value: str, known: Sequence[str]) -> None:
    """Refuse a value that no page of ours offers.

    Raises:
        StrangeAnswer: It is none of those known.
    """
    if value not in known:
        raise StrangeAnswer(question="", answer=value)
