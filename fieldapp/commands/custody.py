"""What people may do with a cooler: seal it, open it again, relinquish it.

Sealing and handing over are barred while something stands against them that can still be put
right; ``already`` records what has happened all the same (R1). Packing is in ``crate.py``, a
receipt on paper in ``receipts.py``.
"""

from collections.abc import Mapping, Sequence
from typing import Any

from fieldapp.commands.asked import NOW, When, check_past
from fieldapp.commands.crate import OPEN, unplaced
from fieldapp.domain.custody import plain_seal, set_hash
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import (
    CoolerReopened,
    CoolerSealed,
    CrateCounted,
    Fact,
    HandoverOffered,
    HandoverStated,
)
from fieldapp.domain.recorded import Reading
from fieldapp.projections import crates
from fieldapp.projections.pages import Pages, Row

TO = ("laboratory", "courier", "night-box", "colleague")
"""Who a cooler is relinquished to."""


class CoolerBare(RuleBroken):
    """No bottle is in the cooler."""

    kind = "cooler-bare"


class SealMissing(RuleBroken):
    """No seal's number was given."""

    kind = "seal-missing"


class SealUsed(RuleBroken):
    """The seal ``number`` is or was on the cooler of box ``box``."""

    kind = "seal-used"


class BottlesLoose(RuleBroken):
    """Filled bottles of the route, ``codes``, are in no cooler and nobody said where they are."""

    kind = "bottles-loose"


class CountOther(RuleBroken):
    """``counted`` bottles are in the cooler and ``packed`` by the record."""

    kind = "count-other"


class NotSealed(RuleBroken):
    """The cooler of box ``box`` bears no seal."""

    kind = "not-sealed"


class WhyMissing(RuleBroken):
    """A seal is broken without a reason."""

    kind = "why-missing"


class WaybillMissing(RuleBroken):
    """A courier takes a cooler without waybill and name."""

    kind = "waybill-missing"


def seal(
    pages: Pages,
    reading: Reading,
    cooler: str,
    *,
    seals: Sequence[str],
    count: int,
    already: bool = False,
    when: When = NOW,
) -> list[Fact]:
    """Close a cooler: its bottles as counted, then its seals; the day's count goes with it (R17).

    Raises:
        CoolerBare, SealMissing, SealUsed: There is nothing to seal, or nothing to seal it with.
        BottlesLoose: A filled bottle of the route is in no cooler and nobody said where it is.
        CountOther: The count is not the record's. ``already`` records this and the former.
        StepOver: It is sealed.
    """
    check_past(when, reading)
    row = _cooler(pages, cooler)
    if row["state"] not in OPEN:
        raise StepOver(at=row["sealed_at"] or row["opened_at"] or row["stated_at"], cooler=cooler)
    if not row["bottles"]:
        raise CoolerBare(box=row["box"])
    numbers = _new_seals(pages, seals)
    loose = unplaced(pages, row["route"])
    if loose and not already:
        raise BottlesLoose(codes=[one["bottle"] for one in loose])
    if count != row["packed"] and not already:
        raise CountOther(counted=count, packed=row["packed"])
    expected = tuple(sorted(row["bottles"]))
    return [
        CrateCounted(route=row["route"], count=count, bottles=expected, **when.fields()),
        _sealed(row, numbers, count, when),
    ]


def reopen(
    pages: Pages,
    reading: Reading,
    cooler: str,
    *,
    reason: str,
    seals: Sequence[str] = (),
    when: When = NOW,
) -> list[Fact]:
    """Break the seals of a cooler on the way, and say why; with new ``seals`` close it at once.

    Raises:
        NotSealed: It stands open.
        WhyMissing: No reason is given.
        StepOver: The laboratory has it.
    """
    check_past(when, reading)
    row = _cooler(pages, cooler)
    if row["state"] == "received":
        raise StepOver(at=row["opened_at"] or row["stated_at"], cooler=cooler)
    if not row["seals"]:
        raise NotSealed(box=row["box"])
    if not reason.strip():
        raise WhyMissing()
    opened = CoolerReopened(
        cooler=cooler,
        route=row["route"],
        broken=tuple(row["seals"]),
        reason=reason.strip(),
        **when.fields(),
    )
    if not any(number.strip() for number in seals):
        return [opened]
    return [opened, _sealed(row, _new_seals(pages, seals), row["packed"], when)]


def relinquish(
    pages: Pages,
    reading: Reading,
    cooler: str,
    *,
    to: str,
    waybill: str = "",
    name: str = "",
    already: bool = False,
    when: When = NOW,
) -> list[Fact]:
    """Hand a sealed cooler over; whoever takes it without a device is named beside it.

    Raises:
        NotSealed: It bears no seal; ``already`` says that it was given away so.
        WaybillMissing: A courier without waybill and name.
        StepOver: It was relinquished, or the laboratory has it.
    """
    check_past(when, reading)
    row = _cooler(pages, cooler)
    if to not in TO:
        raise Unknown(what="custodian", name=to)
    if row["state"] in ("relinquished", "received"):
        at = row["relinquished_at"] or row["opened_at"] or row["stated_at"]
        raise StepOver(at=at, cooler=cooler)
    if not row["seals"] and not already:
        raise NotSealed(box=row["box"])
    waybill, name = waybill.strip(), name.strip()
    if to == "courier" and not (waybill or name):
        raise WaybillMissing()
    facts: list[Fact] = [
        HandoverOffered(
            cooler=cooler, route=row["route"], seals=tuple(row["seals"]), count=row["packed"],
            set=set_hash(row["bottles"]), to=to, **when.fields(),
        )
    ]  # fmt: skip
    if waybill or name:
        given = {"waybill": waybill, "name": name, **when.fields()}
        facts.append(HandoverStated(cooler=cooler, route=row["route"], **given))
    return facts


def _new_seals(pages: Pages, seals: Sequence[str]) -> tuple[str, ...]:
    """Return the numbers as typed, each once; none of them may have been on a cooler before."""
    numbers = {plain_seal(one): " ".join(one.split()) for one in seals if plain_seal(one)}
    if not numbers:
        raise SealMissing()
    for number in numbers.values():
        if held := crates.bearing(pages, number):
            raise SealUsed(number=number, box=held["box"])
    return tuple(numbers.values())


def _sealed(row: Mapping[str, Any], seals: tuple[str, ...], count: int, when: When) -> CoolerSealed:
    return CoolerSealed(
        cooler=row["cooler"], route=row["route"], box=row["box"], seals=seals, count=count,
        **when.fields(),
    )  # fmt: skip


def _cooler(pages: Pages, cooler: str) -> Row:
    found = crates.cooler(pages, cooler)
    if found is None:
        raise Unknown(what="cooler", name=cooler)
    return found
