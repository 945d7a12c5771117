"""What a sampler does at a door and at a tap: open, ask, leave, say what differs, sign, close.

Each function checks the rules and returns the facts of one press, or raises. What has happened is
never refused (R1); what has not may be barred. Bottles and taps are in ``drawing.py``.
"""

from collections.abc import Sequence
from datetime import timedelta

from fieldapp.commands.asked import (
    NOW,
    Asked,
    NotStarted,
    StrangeAnswer,
    When,
    check_past,
    due_of,
    one_of,
    planned,
    refuse,
    standing_of,
)
from fieldapp.domain.bottles import in_order
from fieldapp.domain.deviations import DEVIATIONS
from fieldapp.domain.errors import NotDue, RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import (
    BottleVoided,
    DeviationStated,
    EntryWithdrawn,
    Fact,
    OccupantAgreed,
    QuestionAnswered,
    VisitClosed,
    VisitLeft,
    VisitOpened,
    VisitResumed,
    VisitSigned,
)
from fieldapp.domain.protocols.steps import CONSENT
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc

LEAVE_WHYS = (
    "waiting",
    "nobody-home",
    "child-alone",
    "vacant",
    "water-off",
    "street-works",
    "wrong-house",
    "unfit",
    "refused",
    "other",
)
"""Why a sampler leaves (R18, R38); the first is the ordinary one."""

OUTCOMES = ("done", "unfit", "refused", "nobody-home", "vacant", "water-off", "not-possible")
"""How a visit ends. All but the first close it without the bottles that were planned."""

TAKE_BACK_WITHIN = timedelta(seconds=10)
"""The least time for which a press can be taken back, though another follows it (R45)."""


class StrangeDeviation(RuleBroken):
    """``deviation`` is no kind of the table."""

    kind = "strange-deviation"


class NameMissing(RuleBroken):
    """A signature without a name."""

    kind = "name-missing"


class NotYours(RuleBroken):
    """``by`` recorded the press that somebody else would take back."""

    kind = "not-yours"


class TakenBackLate(RuleBroken):
    """Another act followed, and ten seconds are over."""

    kind = "taken-back-late"


class BottlesWaiting(RuleBroken):
    """Bottles of ``draws`` are set or running; a visit closed as done would leave them open."""

    kind = "bottles-waiting"


def open_visit(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Begin a visit at the door."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.state != "planned":
        refuse(pages, visit, told, VisitOpened)
    return [VisitOpened(visit=visit, **when.fields())]


def leave_visit(
    pages: Asked, reading: Reading, visit: str, *, why: str, reason: str = "", when: When = NOW
) -> list[Fact]:
    """Leave in one press; the reason may follow (R38)."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    one_of(why, LEAVE_WHYS)
    follows = told.state == "left" and reason.strip()
    if told.state != "open" and not follows:
        refuse(pages, visit, told, VisitLeft)
    return [VisitLeft(visit=visit, why=why, reason=reason, **when.fields())]


def resume_visit(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Come back to a visit that was left (R18)."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.state != "left":
        refuse(pages, visit, told, VisitResumed)
    return [VisitResumed(visit=visit, **when.fields())]


def agree(
    pages: Asked, reading: Reading, visit: str, *, how: str, name: str = "", when: When = NOW
) -> list[Fact]:
    """Record that somebody of the household agrees, or refuses."""
    check_past(when, reading)
    one_of(how, ("spoken", "signed", "refused"))
    told = standing_of(pages, visit, reading)
    if told.due.kind != "ask" or told.due.question != CONSENT:
        refuse(pages, visit, told, OccupantAgreed)
    return [OccupantAgreed(visit=visit, how=how, name=name, **when.fields())]


def answer(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    question: str,
    answer: str,
    note: str = "",
    when: When = NOW,
) -> list[Fact]:
    """Record one answer to the question that is due."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.due.kind != "ask" or told.due.question != question:
        refuse(pages, visit, told, QuestionAnswered, question=question)
    if answer not in told.due.answers:
        raise StrangeAnswer(question=question, answer=answer)
    return [
        QuestionAnswered(visit=visit, question=question, answer=answer, note=note, **when.fields())
    ]


def state_deviation(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    kind: str,
    draws: Sequence[int] = (),
    reason: str = "",
    when: When = NOW,
) -> list[Fact]:
    """Record that something was not as the protocol says; its direction is the table's."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.state == "planned":
        raise NotStarted(visit=visit)
    if kind not in DEVIATIONS:
        raise StrangeDeviation(deviation=kind)
    stated = DeviationStated(
        visit=visit,
        step=told.due.step,
        deviation=kind,
        draws=tuple(sorted(set(draws))),
        reason=reason,
        **when.fields(),
    )
    return [stated]


def sign(
    pages: Asked, reading: Reading, visit: str, *, name: str, close: bool = False
) -> list[Fact]:
    """Sign with a typed name; ``close``: end the visit in the same press."""
    told, due = due_of(pages, visit, reading, "sign", over=VisitSigned)
    if not name.strip():
        raise NameMissing(who=due.who)
    signed = VisitSigned(visit=visit, who=due.who, how="typed", name=name.strip())
    if not close:
        return [signed]
    return [signed, VisitClosed(visit=visit, outcome=told.stopped or "done")]


def close(
    pages: Asked, reading: Reading, visit: str, *, outcome: str = "", when: When = NOW
) -> list[Fact]:
    """Close the visit: as done when all is done, else with how it ended without its bottles."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.state == "closed":
        refuse(pages, visit, told, VisitClosed)
    if told.due.kind == "close":
        return [_closed(visit, outcome or told.stopped or "done", when)]
    if outcome in ("", "done"):
        raise NotDue(due=told.due.kind, visit=visit)
    open_draws = [one.draw for one in told.draws if one.state == "running"]
    if open_draws:
        raise BottlesWaiting(draws=open_draws)
    return [_closed(visit, outcome, when)]


def take_back(
    pages: Asked, reading: Reading, visit: str, *, of: str, by: str, reason: str = ""
) -> list[Fact]:
    """Withdraw one press, all its entries: the latest on the visit, or one not ten seconds old."""
    planned(pages, visit)
    entry = pages.fact(of)
    if entry is None or f"visit:{visit}" not in entry.fact.subjects():
        raise Unknown(what="entry", name=of[:8])
    if pages.gone([of]):
        raise StepOver(at=format_utc(reading.at), visit=visit)
    if entry.by != by:
        raise NotYours(by=entry.by)
    acts = [one for one in in_order(pages.recorded(visit)) if one.fact.place == "kitchen"]
    is_latest = bool(acts) and acts[-1].act == entry.act
    if not is_latest and reading.at - entry.at > TAKE_BACK_WITHIN:
        raise TakenBackLate()
    # a signature counts the crate in the same press
    pressed = [one for one in in_order(pages.recorded(visit)) if one.act == entry.act]
    pressed += _voided_with(pages, visit, entry.act)
    return [EntryWithdrawn(of=one.hash, reason=reason) for one in pressed]


def _voided_with(pages: Asked, visit: str, act: str) -> list[Recorded]:
    """Return what the same press said of bottles alone: an exchange voids the one before."""
    told = [
        one
        for row in pages.bottles(visit=visit)
        if row["voided"]
        for one in pages.story(f"bottle:{row['bottle']}")
    ]
    return [one for one in told if one.act == act and isinstance(one.fact, BottleVoided)]


def _closed(visit: str, outcome: str, when: When) -> VisitClosed:
    return VisitClosed(visit=visit, outcome=outcome, **when.fields())
