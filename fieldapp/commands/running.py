"""Water to waste, and the stand inside a visit: what some protocols ask for between two draws."""

from datetime import datetime

from fieldapp.commands.asked import (
    NOW,
    Asked,
    NotYet,
    When,
    check_past,
    due_of,
    latest,
    not_past,
    refuse,
    standing_of,
    stated_at,
)
from fieldapp.commands.last_use import CrossedTimes
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import DeviationStated, Fact, RunEnded, RunStarted, StandStarted
from fieldapp.domain.protocols.standing import Due
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc, in_utc

SENTENCES = {
    "run-unsaid": "Say when the tap was opened and when it was shut.",
}
"""The sentence of each rule broken here; ``words.py`` merges them."""


class RunUnsaid(RuleBroken):
    """A run to waste told as done without its times."""

    kind = "run-unsaid"


def start_stand(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Say that the last tap is shut: the stand inside the visit is measured from here."""
    check_past(when, reading)
    told, due = due_of(pages, visit, reading, "wait", over=StandStarted)
    if due.since is not None:
        refuse(pages, visit, told, StandStarted)
    return [StandStarted(visit=visit, **when.fields())]


def start_run(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Open the tap to waste, as a step asks."""
    check_past(when, reading)
    told, due = due_of(pages, visit, reading, "run", over=RunStarted)
    if due.since is not None:
        refuse(pages, visit, told, RunStarted)
    return [RunStarted(visit=visit, step=due.step, **when.fields())]


def end_run(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Close the tap after a run to waste."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.due.kind != "run" or told.due.since is None:
        refuse(pages, visit, told, RunEnded)
    return [RunEnded(visit=visit, step=told.due.step, **when.fields())]


def run_happened(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    opened: datetime | None = None,
    shut: datetime | None = None,
    reason: str = "",
) -> list[Fact]:
    """Record a run to waste as it happened: told afterwards, or shorter than it had to be (R1).

    While the tap runs, ``opened`` is known and ``shut`` is now unless it is given. With neither
    time a run that was ended too early stays as it is.

    Raises:
        RunUnsaid: A time is missing.
        CrossedTimes: It was shut before it was opened.
        NotYet: A time lies ahead.
    """
    _, due = due_of(pages, visit, reading, "run", over=RunEnded)
    ended = latest(pages.recorded(visit), RunEnded, step=due.step)
    if due.since is None and opened is None and shut is None and ended:
        return [_short(visit, due, reason)]
    start, end = due.since or opened, shut or (reading.at if due.since else None)
    if start is None or end is None:
        raise RunUnsaid()
    for one in (start, end):
        if not_past(one, reading):
            raise NotYet(stated=format_utc(one))
    if in_utc(end) < in_utc(start):
        raise CrossedTimes()
    short = due.minimum is not None and in_utc(end) - in_utc(start) < due.minimum
    return _run(visit, due, opened, shut, reason, short=short)


def _run(
    visit: str,
    due: Due,
    opened: datetime | None,
    shut: datetime | None,
    reason: str,
    *,
    short: bool,
) -> list[Fact]:
    began = stated_at(opened) if opened else NOW
    ended = stated_at(shut) if shut else NOW
    facts: list[Fact] = []
    if due.since is None:
        facts.append(RunStarted(visit=visit, step=due.step, **began.fields()))
    facts.append(RunEnded(visit=visit, step=due.step, **ended.fields()))
    return [*facts, _short(visit, due, reason)] if short else facts


def _short(visit: str, due: Due, reason: str) -> Fact:
    return DeviationStated(visit=visit, step=due.step, deviation="run-short", reason=reason.strip())
