"""What people may do with the crate: count it at a door, pack it into coolers, say what is where.

A filled bottle is carried in the open crate until it is packed (R17). What has happened is never
refused: ``already`` packs a bottle that by the record holds no water.
"""

from collections.abc import Sequence
from datetime import timedelta

from fieldapp.commands.asked import NOW, When, check_past, planned
from fieldapp.domain.bottles import in_order
from fieldapp.domain.codes import normalise
from fieldapp.domain.custody import new_cooler
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import BottleLocated, BottlePacked, CrateCounted, EntryWithdrawn, Fact
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections import crates
from fieldapp.projections.facts import about
from fieldapp.projections.pages import Pages, Row

WHEREABOUTS = ("with-me", "left-behind", "broken", "elsewhere")
"""Where a filled bottle is that is in no cooler; the first stays with the sampler."""

TAKE_BACK_WITHIN = timedelta(seconds=10)
"""The least time for which a press can be taken back, though another follows it (R45)."""

OPEN = ("packing", "reopened")
"""States of a cooler that takes bottles."""


class BoxMissing(RuleBroken):
    """Nobody said which box the bottles go into, and more or less than one stands open."""

    kind = "box-missing"


class BoxClosed(RuleBroken):
    """The load of that ``box`` is sealed; ``cooler`` is its id."""

    kind = "box-closed"


class NothingToPack(RuleBroken):
    """No filled bottle of the route is without a cooler."""

    kind = "nothing-to-pack"


class BottleEmpty(RuleBroken):
    """By the record, ``code`` holds no water."""

    kind = "bottle-empty"


class InSealedCooler(RuleBroken):
    """``code`` lies in the sealed cooler of box ``box``."""

    kind = "in-sealed-cooler"


def count_door(
    pages: Pages, reading: Reading, visit: str, *, count: int, when: When = NOW
) -> list[Fact]:
    """Count the full bottles of a visit into the crate at the door."""
    check_past(when, reading)
    planned(pages, visit)
    full = tuple(sorted(crates.carried(pages, visit)))
    return [CrateCounted(visit=visit, count=count, bottles=full, **when.fields())]


def locate(
    pages: Pages, reading: Reading, route: str, *, bottle: str, how: str, where: str = ""
) -> list[Fact]:
    """Say where a filled bottle is that is in no cooler."""
    _route(pages, route)
    code = normalise(bottle)
    if pages.bottle(code) is None:
        raise Unknown(what="bottle", name=code)
    if how not in WHEREABOUTS:
        raise Unknown(what="whereabouts", name=how)
    return [BottleLocated(bottle=code, how=how, route=route, where=where.strip())]


def pack(
    pages: Pages,
    reading: Reading,
    route: str,
    *,
    box: str = "",
    codes: Sequence[str] = (),
    already: bool = False,
    when: When = NOW,
) -> list[Fact]:
    """Put bottles into the open cooler of a box; without codes all that are in the crate.

    The box's next load gets an id of its own when its first bottle is packed. A bottle that is in
    there already is not recorded again; one of another open cooler moves.

    Raises:
        BoxMissing, BoxClosed: There is no open cooler, or that box is sealed.
        NothingToPack: Every filled bottle has its place.
        BottleEmpty: By the record it holds no water, and nobody says that it does.
        InSealedCooler: It lies in a sealed cooler; that one is opened first.
        BadCode: What was scanned is no code of ours.
    """
    check_past(when, reading)
    _route(pages, route)
    wanted = [normalise(code) for code in codes] or _in_the_crate(pages, route)
    if not wanted:
        raise NothingToPack(route=route)
    cooler, box = _open_cooler(pages, route, box.strip())
    for code in wanted:
        _check_packable(pages, code, cooler, already)
    return [
        BottlePacked(bottle=code, cooler=cooler, route=route, box=box, **when.fields())
        for code in dict.fromkeys(wanted)
        if (row := pages.bottle(code)) is None or row["cooler"] != cooler
    ]


def take_back(pages: Pages, reading: Reading, route: str, *, of: str, by: str) -> list[Fact]:
    """Withdraw a press on the crate and its coolers, all its entries: the latest, or a young one.

    Raises:
        Unknown: No such press is on this route.
        StepOver: Something followed and ten seconds are over, or it is another person's (R45).
    """
    entry = crates.latest_press(pages, route)
    found = pages.fact(of)
    if found is None or f"route:{route}" not in found.fact.subjects():
        raise Unknown(what="entry", name=of[:8])
    follows = entry is None or entry.act != found.act
    if found.by != by or (follows and reading.at - found.at > TAKE_BACK_WITHIN):
        raise StepOver(at=format_utc(found.at), route=route)
    pressed = [
        one
        for one in in_order(about(pages.db, f"route:{route}", crates.PRESSES))
        if one.act == found.act
    ]
    return [EntryWithdrawn(of=one.hash) for one in pressed]


def unplaced(pages: Pages, route: str) -> list[Row]:
    """Return the filled bottles in no cooler of which nobody said where they are."""
    return [one for one in crates.loose(pages, route) if not one["located"]]


def _in_the_crate(pages: Pages, route: str) -> list[str]:
    """Return the loose bottles that are at hand: not said to be left, broken or elsewhere."""
    loose = crates.loose(pages, route)
    return [str(one["bottle"]) for one in loose if one["located"] in ("", "with-me")]


def _open_cooler(pages: Pages, route: str, box: str) -> tuple[str, str]:
    """Return the open load of that box and the box; a new load where it stands empty."""
    mine = crates.coolers(pages, route=route)
    taking = [one for one in mine if one["state"] in OPEN]
    if not box:
        if len(taking) != 1:
            raise BoxMissing()
        return str(taking[0]["cooler"]), str(taking[0]["box"])
    for one in taking:
        if one["box"] == box:
            return str(one["cooler"]), box
    for one in mine:
        if one["box"] == box and one["state"] == "sealed":
            raise BoxClosed(box=box, cooler=one["cooler"])
    return new_cooler(), box


def _check_packable(pages: Pages, code: str, cooler: str, already: bool) -> None:
    row = pages.bottle(code)
    if row is None or row["cooler"] == cooler:
        return
    if not row["filled"] and not already:
        raise BottleEmpty(code=code)
    held = crates.cooler(pages, row["cooler"]) if row["cooler"] else None
    if held and held["state"] not in OPEN:
        raise InSealedCooler(code=code, box=held["box"], cooler=held["cooler"])


def _route(pages: Pages, route: str) -> Row:
    found = pages.route(route)
    if found is None:
        raise Unknown(what="route", name=route)
    return found
