"""Water to waste, and the stand inside a visit: what some protocols ask for between two draws."""

from fieldapp.commands.asked import NOW, Asked, When, check_past, due_of, refuse, standing_of
from fieldapp.domain.facts import Fact, RunEnded, RunStarted, StandStarted
from fieldapp.domain.recorded import Reading


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
    _, due = due_of(pages, visit, reading, "run", over=RunStarted)
    return [RunStarted(visit=visit, step=due.step, **when.fields())]


def end_run(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Close the tap after a run to waste."""
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.due.kind != "run" or told.due.since is None:
        refuse(pages, visit, told, RunEnded)
    return [RunEnded(visit=visit, step=told.due.step, **when.fields())]
