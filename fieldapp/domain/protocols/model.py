"""A sampling protocol as a document that the program executes."""

import functools
import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from importlib import resources
from typing import Any

from fieldapp.domain.errors import Unknown
from fieldapp.domain.protocols.document import BadProtocol, Sheet
from fieldapp.domain.protocols.parts import read_stand, read_steps, read_tap
from fieldapp.domain.protocols.steps import (
    LAST_USE,
    Ask,
    Fill,
    Look,
    Measure,
    Photograph,
    Run,
    StandRule,
    StandWait,
    Step,
    TapRule,
)


@dataclass(frozen=True, slots=True)
class Draw:
    """One draw as the protocol defines it. Not ``keep``: caught and poured away (R3)."""

    draw: int
    volume_ml: int
    mouth_min_mm: int
    kind: str
    analyse: tuple[str, ...]
    keep: bool
    running_on: bool


@dataclass(frozen=True, slots=True)
class Protocol:
    """One document. ``sha256`` is the hex digest of its UTF-8 text ``toml``."""

    id: str
    title: str
    source: str
    in_force_from: date | None
    in_force_to: date | None
    analytes: tuple[str, ...]
    acidify_within: timedelta | None
    acidify_source: str
    stand: StandRule | None
    tap: TapRule
    steps: tuple[Step, ...]
    sha256: str
    toml: str
    jurisdiction: str = ""

    def in_force_on(self, day: date) -> bool:
        """Say whether the text binds on that day; outside it is noted, never refused."""
        after = self.in_force_from is None or self.in_force_from <= day
        return after and (self.in_force_to is None or day <= self.in_force_to)

    def draws(self) -> tuple[Draw, ...]:
        """Return the draws in their order; those kept carry a label."""
        return tuple(
            Draw(
                draw=fill.draw,
                volume_ml=fill.volume_ml,
                mouth_min_mm=fill.mouth_min_mm,
                kind=fill.kind,
                analyse=fill.analyse,
                keep=fill.keep,
                running_on=fill.running_on,
            )
            for fill in self.steps
            if isinstance(fill, Fill)
        )

    def labelled(self, *, keep_poured: bool = False) -> tuple[Draw, ...]:
        """Return the draws that carry a label; all of them where the round keeps the poured."""
        return tuple(draw for draw in self.draws() if draw.keep or keep_poured)

    def beyond(self) -> tuple[str, ...]:
        """Return the ids of steps that this program reads but cannot walk yet."""
        return tuple(step.id for step in self.steps if isinstance(step, Measure | Photograph))


def read_protocol(text: str) -> Protocol:
    """Return the protocol of a TOML document.

    Raises:
        BadProtocol: With every fault at once: its path, line, value and what would be right.
    """
    sheet = Sheet(text)
    top = sheet.top
    window = top.table("in_force")
    analytes = top.names_in("analytes")
    found: dict[str, Any] = {
        "id": top.name("id"),
        "title": top.text("title"),
        "source": top.text("source"),
        "jurisdiction": top.text("jurisdiction", ""),
        "in_force_from": window.day("from", optional=True) if window else None,
        "in_force_to": window.day("to", optional=True) if window else None,
        "analytes": analytes,
        "acidify_within": top.duration("acidify_within", optional=True),
        "acidify_source": top.text("acidify_source", ""),
        "stand": read_stand(sheet),
        "tap": read_tap(sheet),
    }
    steps = read_steps(sheet, analytes)
    if window:
        window.close("from | to")
    top.close()
    _check_window(sheet, found["in_force_from"], found["in_force_to"])
    whole = tuple(step for step in steps if step is not None)
    if len(whole) == len(steps):  # else the numbers of the steps would be wrong
        _check_steps(sheet, whole, found["stand"])
    if sheet.faults:
        raise BadProtocol(sheet.faults)
    found["steps"] = _with_last_use(whole, found["stand"])
    digest = hashlib.sha256(text.encode()).hexdigest()
    return Protocol(**found, sha256=digest, toml=text)


@functools.cache
def shipped() -> dict[str, Protocol]:
    """Return the protocols that come with the program, by their id."""
    folder = resources.files(__package__)
    found = [one for one in folder.iterdir() if one.name.endswith(".toml")]
    # bytes, for a text read would change line ends, and with them the digest
    made = [read_protocol(one.read_bytes().decode()) for one in found]
    return {one.id: one for one in sorted(made, key=lambda one: one.id)}


def find(protocol: str) -> Protocol:
    """Return the shipped protocol of that id.

    Raises:
        Unknown: None ships under that id.
    """
    try:
        return shipped()[protocol]
    except KeyError:
        raise Unknown(what="protocol", name=protocol) from None


def _with_last_use(steps: tuple[Step, ...], stand: StandRule | None) -> tuple[Step, ...]:
    """Ask for the last use right before the first fill where the document names no place for it."""
    asked = any(isinstance(step, Ask) and step.question == LAST_USE for step in steps)
    if stand is None or asked:
        return steps
    first = next(n for n, step in enumerate(steps) if isinstance(step, Fill))
    ask = Ask(id=LAST_USE, question=LAST_USE, why=stand.why, source=stand.source)
    return (*steps[:first], ask, *steps[first:])


def _check_window(sheet: Sheet, start: date | None, end: date | None) -> None:
    if start and end and end < start:
        sheet.fault(("in_force", "to"), end.isoformat(), "out-of-range", f"from {start} on")


def _check_steps(sheet: Sheet, steps: Sequence[Step], stand: StandRule | None) -> None:
    """Note what no single step can know: double names, and an order that cannot be walked."""
    ids: set[str] = set()
    questions: set[str] = set()
    for number, step in enumerate(steps, start=1):
        path = ("step", number)
        if step.id in ids:
            sheet.fault((*path, "id"), step.id, "twice", "an id of its own")
        ids.add(step.id)
        question = _question(step)
        if question in questions:
            sheet.fault((*path, "ask", "question"), question, "twice", "each question once")
        questions.update({question} - {""})
    _check_fills(sheet, steps)
    _check_stands(sheet, steps, stand)


def _question(step: Step) -> str:
    if isinstance(step, Ask):
        return step.question
    return step.at if isinstance(step, Look) else ""


def _check_fills(sheet: Sheet, steps: Sequence[Step]) -> None:
    last = 0
    for number, step in enumerate(steps, start=1):
        if not isinstance(step, Fill):
            continue
        path = ("step", number, "fill")
        if step.draw <= last:
            sheet.fault((*path, "draw"), step.draw, "order", f"more than {last}")
        if step.running_on and not (number > 1 and isinstance(steps[number - 2], Fill)):
            sheet.fault((*path, "running_on"), "true", "order", "right after another fill")
        last = max(last, step.draw)
    if not last:
        sheet.fault(("step",), "", "missing", "at least one fill")


def _check_stands(sheet: Sheet, steps: Sequence[Step], stand: StandRule | None) -> None:
    """Note stands that nothing ends or begins, and a run that would break the stand before it."""
    waiting = stand is not None
    for number, step in enumerate(steps, start=1):
        if isinstance(step, Ask) and step.question == LAST_USE and stand is None:
            sheet.fault(("step", number, "ask", "question"), LAST_USE, "order", "with a [stand]")
        if isinstance(step, Ask) and step.question == LAST_USE and not waiting and stand:
            sheet.fault(("step", number, "ask", "question"), LAST_USE, "order", "before any fill")
        if isinstance(step, Run) and waiting:
            sheet.fault(
                ("step", number, "run"), "", "order", "after the fill that the stand is for"
            )
        if isinstance(step, StandWait):
            if waiting:
                sheet.fault(("step", number, "stand"), "", "order", "one stand before a fill")
            waiting = True
        if isinstance(step, Fill):
            waiting = False
    if waiting:
        sheet.fault(("step",), "", "order", "a fill after the last stand")
