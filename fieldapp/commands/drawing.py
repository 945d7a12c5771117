"""What a sampler does with bottles and the tap: set, open, fill, close, blank, already done.

Draws that run on are one act (R2). A code this device has not heard of is taken with a note (R15);
one that belongs elsewhere is barred with what it belongs to, until somebody says that it is filled.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

from fieldapp.commands.asked import (
    NOW,
    Asked,
    NotStarted,
    StrangeAnswer,
    When,
    check_past,
    due_of,
    standing_of,
)
from fieldapp.commands.kitchen import StrangeDeviation
from fieldapp.domain.codes import normalise
from fieldapp.domain.deviations import DEVIATIONS
from fieldapp.domain.errors import RuleBroken, StepOver
from fieldapp.domain.facts import (
    BottleFilled,
    BottleSet,
    BottleVoided,
    DeviationStated,
    DrawPoured,
    Fact,
    TapClosed,
    TapOpened,
)
from fieldapp.domain.protocols.standing import DrawStanding, Standing
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc

FILLS = ("line", "below", "over", "spilled")
"""How full a bottle is, in one press (R21); the first is the ordinary one."""
VOID_WHYS = ("broken", "lost", "dirty", "label", "other")
"""Why a bottle that was meant for a draw will hold no water (R15)."""


class WrongBottle(RuleBroken):
    """``code`` belongs to ``draw`` at ``site``, visit ``visit``, not to draw ``wanted`` here."""

    kind = "wrong-bottle"


class AlreadyFilled(RuleBroken):
    """``code`` was filled at ``site``, ``draw``, ``filled_at``."""

    kind = "already-filled"


class BottleVoid(RuleBroken):
    """``code`` is out of use: ``why``."""

    kind = "bottle-void"


class LotMissing(RuleBroken):
    """A field blank without the lot of its water."""

    kind = "lot-missing"


class NothingDone(RuleBroken):
    """A statement of what was done already that names no draw."""

    kind = "nothing-done"


class NoSuchDraw(RuleBroken):
    """``draw`` is none of this visit's."""

    kind = "no-such-draw"


@dataclass(frozen=True, slots=True)
class Drawn:
    """What became of one draw: its bottle (empty: poured away), how full, measured millilitres."""

    draw: int
    code: str = ""
    fill: str = "line"
    volume_ml: int = 0
    water_lot: str = ""


def set_bottle(
    pages: Asked, reading: Reading, visit: str, *, code: str, when: When = NOW
) -> list[Fact]:
    """Stand a scanned bottle in its place; a spare is bound by it.

    Raises:
        BadCode: It is no code.
        WrongBottle: It belongs to another draw or visit.
        AlreadyFilled: It holds water.
    """
    check_past(when, reading)
    known = normalise(code)
    told = standing_of(pages, visit, reading)
    if any(one.bottle == known for one in told.draws):
        raise StepOver(at=format_utc(reading.at), visit=visit)
    told, due = due_of(pages, visit, reading, "set", over=BottleSet, bottle=known)
    draw = _draw(told, due.next_draw)
    return [_set(pages, visit, known, draw, when)]


def open_tap(pages: Asked, reading: Reading, visit: str, when: When = NOW) -> list[Fact]:
    """Open the tap for draws that run on."""
    check_past(when, reading)
    _, due = due_of(pages, visit, reading, "tap", over=TapOpened)
    return [TapOpened(visit=visit, draws=due.draws, **when.fields())]


def fill(
    pages: Asked, reading: Reading, visit: str, *, fills: Mapping[int, Drawn], when: When = NOW
) -> list[Fact]:
    """Record the fill that is due: one draw, or all that ran on since the tap was opened.

    A draw that ``fills`` does not name was filled to the line.
    """
    check_past(when, reading)
    told, due = due_of(pages, visit, reading, "fill", over=BottleFilled)
    drawn = [_draw(told, number) for number in due.draws]
    made = [_filling(visit, one, fills.get(one.draw, Drawn(one.draw)), when) for one in drawn]
    if any(one.state == "running" for one in drawn):
        return [TapClosed(visit=visit, draws=due.draws, **when.fields()), *made]
    return made


def blank(
    pages: Asked, reading: Reading, visit: str, *, water_lot: str, code: str = "", when: When = NOW
) -> list[Fact]:
    """Pour the field blank: its bottle, the lot of its water (R40)."""
    check_past(when, reading)
    told, due = due_of(pages, visit, reading, "blank", over=BottleFilled)
    draw = _draw(told, due.next_draw or due.draws[0])
    facts: list[Fact] = []
    bottle = draw.bottle
    if not bottle:
        bottle = normalise(code)
        facts.append(_set(pages, visit, bottle, draw, when))
    if not water_lot.strip():
        raise LotMissing()
    lot = water_lot.strip()
    poured = Drawn(draw.draw, bottle, water_lot=lot)
    return [*facts, _filled(visit, poured, when)]


def already_done(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    drawn: Sequence[Drawn],
    deviation: str,
    reason: str = "",
    when: When = NOW,
) -> list[Fact]:
    """Record draws as they happened, though a bar stood before them, with the deviation (R1).

    No order, stand or binding is asked for: it has happened. Only what was never a code is
    refused.
    """
    check_past(when, reading)
    told = standing_of(pages, visit, reading)
    if told.state == "planned":
        raise NotStarted(visit=visit)
    if deviation not in DEVIATIONS:
        raise StrangeDeviation(deviation=deviation)
    if not drawn:
        raise NothingDone()
    stated = DeviationStated(
        visit=visit,
        step=told.due.step,
        deviation=deviation,
        draws=tuple(one.draw for one in drawn),
        reason=reason,
        **when.fields(),
    )
    done = [fact for one in drawn for fact in _as_it_happened(pages, visit, told, one, when)]
    return [stated, *done]


def swap_bottle(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    draw: int,
    code: str,
    why: str,
    when: When = NOW,
) -> list[Fact]:
    """Put another bottle in the place of the one set or printed for a draw, and void that one."""
    check_past(when, reading)
    if why not in VOID_WHYS:
        raise StrangeAnswer(question="why", answer=why)
    told = standing_of(pages, visit, reading)
    if told.state == "planned":
        raise NotStarted(visit=visit)
    meant = _draw(told, draw)
    if meant.state not in ("waiting", "set"):
        raise AlreadyFilled(
            code=meant.bottle, site=visit, draw=draw, filled_at=_text(meant.filled_at)
        )
    known = normalise(code)
    if meant.bottle == known:
        raise StepOver(at=format_utc(reading.at), visit=visit)
    old = {meant.bottle} if meant.bottle else _printed_for(pages, visit, draw)
    gone = [BottleVoided(bottle=one, why=why) for one in sorted(old - {known})]
    return [*gone, _set(pages, visit, known, meant, when)]


def _set(pages: Asked, visit: str, code: str, draw: DrawStanding, when: When) -> BottleSet:
    row = pages.bottle(code)
    if row is not None:
        _check_belongs(row, visit, code, draw.draw)
    return _bound(row, visit, code, draw, when)


def _bound(
    row: Mapping[str, Any] | None, visit: str, code: str, draw: DrawStanding, when: When
) -> BottleSet:
    return BottleSet(
        visit=visit,
        bottle=code,
        draw=draw.draw,
        kind_=draw.kind,
        purpose=draw.purpose,
        held="unknown" if row is None else "known",
        **when.fields(),
    )


def _check_belongs(row: Mapping[str, object], visit: str, code: str, wanted: int) -> None:
    """Refuse a bottle that is void, full or somebody else's; R1's three ways stand beside."""
    what = {"code": code, "site": row["site"] or row["visit"], "draw": row["draw"]}
    if row["voided"]:
        raise BottleVoid(code=code, why=row["voided"])
    if row["filled"]:
        raise AlreadyFilled(**what, filled_at=row["filled_at"])
    bound = row["set_at"] or row["printed_for"]
    elsewhere = bound and (row["visit"], row["draw"]) != (visit, wanted)
    if elsewhere:
        raise WrongBottle(**what, visit=row["visit"], wanted=wanted)


def _filling(visit: str, draw: DrawStanding, given: Drawn, when: When) -> Fact:
    if given.fill not in FILLS:
        raise StrangeAnswer(question="fill", answer=given.fill)
    if not draw.keep:
        return DrawPoured(visit=visit, draw=draw.draw, fill=given.fill, **when.fields())
    return _filled(visit, replace(given, code=draw.bottle, water_lot=""), when)


def _filled(visit: str, given: Drawn, when: When) -> BottleFilled:
    return BottleFilled(
        visit=visit,
        bottle=given.code,
        draw=given.draw,
        fill=given.fill,
        volume_ml=given.volume_ml,
        water_lot=given.water_lot.strip(),
        **when.fields(),
    )


def _as_it_happened(
    pages: Asked, visit: str, told: Standing, given: Drawn, when: When
) -> list[Fact]:
    """Return the filling, with a bottle of elsewhere or a spare first stood in its place here."""
    draw = _draw(told, given.draw)
    code = normalise(given.code) if given.code.strip() else draw.bottle
    if given.fill not in FILLS:
        raise StrangeAnswer(question="fill", answer=given.fill)
    if not code:
        return [DrawPoured(visit=visit, draw=draw.draw, fill=given.fill, **when.fields())]
    row = pages.bottle(code)
    meant = row is not None and (row["visit"], row["draw"]) == (visit, draw.draw)
    if row is not None and row["filled"] and meant:
        raise StepOver(at=str(row["filled_at"]), visit=visit)
    filled = _filled(visit, replace(given, code=code), when)
    return [filled] if meant else [_bound(row, visit, code, draw, when), filled]


def _printed_for(pages: Asked, visit: str, draw: int) -> set[str]:
    rows = pages.bottles(visit=visit)
    return {
        str(row["bottle"])
        for row in rows
        if row["printed_for"] == visit and row["draw"] == draw and not row["voided"]
    }


def _text(at: datetime | None) -> str:
    return format_utc(at) if at else ""


def _draw(told: Standing, number: int) -> DrawStanding:
    for one in told.draws:
        if one.draw == number:
            return one
    raise NoSuchDraw(draw=number)
