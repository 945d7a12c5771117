"""What of a recorded fact may be corrected and by whom, and the check of each new value.

A deviation, a decision and a result are not corrected: they are added to.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from fieldapp.commands import last_use
from fieldapp.commands.asked import StrangeAnswer, one_of
from fieldapp.commands.drawing import FILLS, LotMissing
from fieldapp.commands.kitchen import LEAVE_WHYS, OUTCOMES, NameMissing
from fieldapp.domain.codes import normalise
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import BottleFilled, WaterUsed
from fieldapp.domain.protocols.stations import asks
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc
from fieldapp.projections.pages import Pages

SENTENCES = {
    "not-correctable": (
        "That is not corrected. Record what is right beside it, or settle the finding."
    ),
    "volume-out-of-range": (
        "{value} is no volume of a bottle. Type millilitres, or leave it empty if nobody measured."
    ),
    "number-in-use": (
        "The laboratory's number {number} stands on bottle {other} already. Look at both stickers."
    ),
}
"""The sentence of each rule broken here; ``words.py`` merges them."""

MOST_ML = 20_000
HOWS = ("spoken", "signed", "refused")
SAMPLER, CLERK, COORDINATOR = "sampler", "clerk", "coordinator"


@dataclass(frozen=True, slots=True)
class Correctable:
    """What of a kind may be corrected besides its time, and whose own entries a role may."""

    fields: tuple[str, ...] = ()
    role: str = SAMPLER


CORRECTABLE: Mapping[str, Correctable] = {
    "visit.opened": Correctable(),
    "visit.left": Correctable(("why",)),
    "visit.resumed": Correctable(),
    "occupant.agreed": Correctable(("how", "name")),
    "question.answered": Correctable(("answer", "note")),
    "water.used": Correctable(("exact", "from", "to", "where", "known_by", "told_by")),
    "stand.started": Correctable(),
    "run.started": Correctable(),
    "run.ended": Correctable(),
    "bottle.set": Correctable(),
    "tap.opened": Correctable(),
    "tap.closed": Correctable(),
    "bottle.filled": Correctable(("fill", "volume_ml", "water_lot", "bottle")),
    "draw.poured": Correctable(("fill",)),
    "visit.signed": Correctable(("name",)),
    "visit.closed": Correctable(("outcome",)),
    "bottle.received": Correctable(("laboratory_number",), role=CLERK),
}
"""By kind. A role corrects its own entries; the coordinator those of everybody."""

Check = Callable[[Pages, Recorded, Any], Any]


class NotCorrectable(RuleBroken):
    """``what`` is a kind, or a field of one, that is never corrected."""

    kind = "not-correctable"


class VolumeOutOfRange(RuleBroken):
    """``value`` is no volume that a bottle holds."""

    kind = "volume-out-of-range"


class NumberInUse(RuleBroken):
    """The laboratory's ``number`` stands on bottle ``other``."""

    kind = "number-in-use"


def fields_for(kind: str) -> tuple[str, ...]:
    """Return the fields of a kind that may be corrected besides its time; none of others."""
    return CORRECTABLE[kind].fields if kind in CORRECTABLE else ()


def checked(pages: Pages, entry: Recorded, changes: Mapping[str, Any]) -> dict[str, Any]:
    """Return the new values, each looked at; refuse a field that is not corrected."""
    if isinstance(entry.fact, WaterUsed):
        return _last_use(entry, entry.fact, changes)
    allowed = fields_for(entry.fact.kind)
    for name in changes:
        if name not in allowed:
            raise NotCorrectable(what=name)
    return {name: CHECKS[name](pages, entry, value) for name, value in changes.items()}


def _last_use(entry: Recorded, given: WaterUsed, changes: Mapping[str, Any]) -> dict[str, Any]:
    """Return the new statement; what ran after it was made is another use, no correction."""
    if not changes:
        return {}
    exact = str(changes.get("exact", given.exact))
    first, last = given.from_, given.to
    if "at" in changes or exact != given.exact:
        told = entry.in_place()
        then = Reading(told.at, told.off, told.mono, told.boot)
        limits = last_use.bounds(exact, changes.get("at"), changes.get("to"), then)
        first, last = (format_utc(one) for one in limits) if limits else ("", "")
    where = str(changes.get("where", given.where))
    known_by = str(changes.get("known_by", given.known_by))
    one_of(where, last_use.WHERE)
    one_of(known_by, last_use.KNOWN_BY)
    told_by = str(changes.get("told_by", given.told_by))
    return {
        "exact": exact, "from": first, "to": last, "where": where, "known_by": known_by,
        "told_by": told_by if known_by == "stated" else "",
    }  # fmt: skip


def _choice(known: tuple[str, ...]) -> Check:
    def check(pages: Pages, entry: Recorded, value: Any) -> str:
        one_of(str(value), known)
        return str(value)

    return check


def _answer(pages: Pages, entry: Recorded, value: Any) -> str:
    """Take an answer that the visit's document offers to that question."""
    question = getattr(entry.fact, "question", "")
    row = pages.visit(getattr(entry.fact, "visit", ""))
    protocol = pages.protocol(row["sha256"]) if row else None
    ask = asks(protocol).get(question) if protocol else None
    if ask is None or value not in ask.answers:
        raise StrangeAnswer(question=question, answer=value)
    return str(value)


def _volume(pages: Pages, entry: Recorded, value: Any) -> int:
    if not isinstance(value, int) or not 0 <= value <= MOST_ML:
        raise VolumeOutOfRange(value=value)
    return value


def _bottle(pages: Pages, entry: Recorded, value: Any) -> str:
    code = normalise(str(value))
    if pages.bottle(code) is None:
        raise Unknown(what="bottle", name=code)
    return code


def _lot(pages: Pages, entry: Recorded, value: Any) -> str:
    """Take the lot of a blank's water; the tap's own water has none."""
    if not isinstance(entry.fact, BottleFilled) or not entry.fact.water_lot:
        raise NotCorrectable(what="water_lot")
    if not str(value).strip():
        raise LotMissing()
    return str(value).strip()


def _name(pages: Pages, entry: Recorded, value: Any) -> str:
    if entry.fact.kind == "visit.signed" and not str(value).strip():
        raise NameMissing(who=getattr(entry.fact, "who", ""))
    return str(value).strip()


def _number(pages: Pages, entry: Recorded, value: Any) -> str:
    number, bottle = str(value).strip(), str(getattr(entry.fact, "bottle", ""))
    laboratory = _laboratory(pages, bottle)
    for other in pages.by_number(number) if number else ():
        if other != bottle and _laboratory(pages, other) == laboratory:
            raise NumberInUse(number=number, other=other)
    return number


def _laboratory(pages: Pages, bottle: str) -> str:
    row = pages.bottle(bottle)
    found = pages.round(row["round"]) if row and row["round"] else None
    return str(found["laboratory"]) if found else ""


CHECKS: Mapping[str, Check] = {
    "why": _choice(LEAVE_WHYS),
    "how": _choice(HOWS),
    "outcome": _choice(OUTCOMES),
    "fill": _choice(FILLS),
    "answer": _answer,
    "note": lambda pages, entry, value: str(value).strip(),
    "name": _name,
    "volume_ml": _volume,
    "water_lot": _lot,
    "bottle": _bottle,
    "laboratory_number": _number,
}
