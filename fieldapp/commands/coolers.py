"""What people may do with a cooler at the counter: open it, and say where its bottles belong.

Seals and bottles are said as they are seen, before anything expected is shown (R14).
"""

from collections.abc import Sequence

from fieldapp.domain.custody import new_cooler, plain_seal
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import CoolerOpened
from fieldapp.domain.recorded import Reading
from fieldapp.projections import arrivals
from fieldapp.projections.pages import Pages

NO_RECORD = "no-record"
"""What the clerk chooses for a cooler that is none of those on the road."""

MOST_BOTTLES = 500


class OtherCooler(RuleBroken):
    """By its record the bottle lies in ``cooler``; ``why`` is ``on-the-road`` or ``open-here``."""

    kind = "other-cooler"


class SealUnsaid(RuleBroken):
    """Neither a seal's number is given nor that no seal is on the cooler."""

    kind = "seal-unsaid"


def open_cooler(
    pages: Pages,
    reading: Reading,
    *,
    seals: Sequence[str],
    whole: bool,
    count: int,
    cooler: str = "",
) -> Decision:
    """Open a cooler: its seals as read, whole or broken, its bottles as counted.

    ``cooler`` is empty until somebody chose one: it is found by the seals then, and where they
    lead to none or to several the answer asks ``which``. ``NO_RECORD`` makes a cooler that no
    record is here of. One that was opened already is shown again and nothing is recorded.

    Raises:
        SealUnsaid: A whole seal without a number.
        Unknown: The chosen cooler is not on the road here.
    """
    read = tuple(dict.fromkeys(filter(None, map(_read, seals))))
    if whole and not read:
        raise SealUnsaid()
    if not cooler:
        found = arrivals.bearing(pages, read)
        if len(found) != 1:
            return Decision((), {"which": True})
        cooler = found[0].cooler
    known = arrivals.arrival(pages, new_cooler() if cooler == NO_RECORD else cooler)
    if known.opened:
        return Decision((), {"cooler": cooler, "again": True})
    if cooler != NO_RECORD and not known.recorded:
        raise Unknown(what="cooler", name=cooler)
    laboratory = _laboratory_of(pages, known.route)
    opened = CoolerOpened(
        cooler=known.cooler, seal_read=read, whole=whole, count=count, laboratory=laboratory
    )
    return Decision((opened,), {"cooler": known.cooler, "again": False})


def place_of(pages: Pages, bottle: str, cooler: str, arrived: str) -> tuple[str, bool]:
    """Return the cooler a bottle is received in, and whether its record names another.

    A loose bottle whose own cooler was opened here belongs to that one.

    Raises:
        OtherCooler: Its record names another cooler and ``arrived`` does not say what to do.
    """
    packed = arrivals.packed_in(pages, bottle)
    if not packed or packed == cooler:
        return cooler, False
    own = arrivals.arrival(pages, packed)
    if own.stated or (own.opened and not cooler):
        return cooler or packed, False
    if not arrived:
        why = "open-here" if own.opened else "on-the-road"
        raise OtherCooler(bottle=bottle, cooler=packed, why=why)
    return cooler, True


def _read(seal: str) -> str:
    """Return a seal as it was read, blanks tidied; empty where nothing of a number is in it."""
    return " ".join(seal.split()) if plain_seal(seal) else ""


def _laboratory_of(pages: Pages, route: str) -> str:
    """Return the laboratory of the route's round; of a cooler without a record the latest one's."""
    planned = pages.route(route) if route else None
    found = pages.round(planned["round"]) if planned else next(iter(pages.rounds()), None)
    return str(found["laboratory"]) if found else ""
