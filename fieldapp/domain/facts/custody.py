"""Facts of custody: which bottle is in which cooler, who held it, which seal was on it.

A cooler is one load of one closed box, from its first bottle to its receipt; it has an id of its
own and is never named by its seal. ``box`` is the number painted on the box.
"""

from collections.abc import Mapping
from typing import Any

from fieldapp.domain.facts.base import ROUTE_LAB, Done, fact, private


@fact("crate.counted", place="custody", reach=ROUTE_LAB)
class CrateCounted(Done):
    """The bottles in the crate were counted: at a door (``visit``) or for the day (``route``).

    ``count`` is what was counted, ``bottles`` what the record expects there.
    """

    count: int
    bottles: tuple[str, ...]
    visit: str = ""
    route: str = ""


@fact("bottle.located", place="custody", reach=ROUTE_LAB)
class BottleLocated(Done):
    """Somebody says where a filled bottle is that is in no cooler (R17)."""

    bottle: str
    how: str  # with-me, left-behind, broken, elsewhere
    route: str = ""
    where: str = private()


@fact("bottle.packed", place="custody", reach=ROUTE_LAB)
class BottlePacked(Done):
    """A bottle was put into a cooler."""

    bottle: str
    cooler: str
    route: str
    box: str = ""


@fact("cooler.sealed", place="custody", reach=ROUTE_LAB)
class CoolerSealed(Done):
    """A cooler was closed and its numbered seals put on."""

    cooler: str
    route: str
    box: str
    seals: tuple[str, ...]
    count: int


@fact("cooler.reopened", place="custody", reach=ROUTE_LAB)
class CoolerReopened(Done):
    """A sealed cooler was opened on the way: which seals were broken, and why."""

    cooler: str
    route: str
    broken: tuple[str, ...]
    reason: str = private()


@fact("handover.offered", place="custody", reach=ROUTE_LAB)
class HandoverOffered(Done):
    """The holder relinquishes a sealed cooler; ``set`` is the hash over its sorted codes.

    ``to`` is a kind: laboratory, courier, night-box, colleague.
    """

    cooler: str
    route: str
    seals: tuple[str, ...]
    count: int
    set: str
    to: str = "laboratory"


@fact("handover.stated", place="custody", reach=ROUTE_LAB)
class HandoverStated(Done):
    """A custodian without a device takes a cooler: who, on which waybill."""

    cooler: str
    route: str
    waybill: str = ""
    name: str = private()


@fact("cooler.opened", place="bench", reach=ROUTE_LAB)
class CoolerOpened(Done):
    """The laboratory opens a cooler: the seals as read and the bottles as counted, seen first."""

    cooler: str
    seal_read: tuple[str, ...]
    whole: bool
    count: int
    laboratory: str = ""


@fact("receipt.stated", place="bench", reach=ROUTE_LAB)
class ReceiptStated(Done):
    """A laboratory that runs nothing of ours received a cooler (R12): date, numbers, document.

    ``numbers`` maps a bottle to the laboratory's own number, empty where none was given;
    ``document`` is the SHA-256 of the signed sheet as it was kept, ``n`` its bytes, ``media`` its
    type, all empty where none was.
    """

    cooler: str
    numbers: Mapping[str, str]
    on: str
    document: str = ""
    n: int = 0
    media: str = ""
    name: str = private()

    def blobs(self) -> tuple[dict[str, Any], ...]:
        """Return the signed sheet as an entry names it, if there is one."""
        return ({"h": self.document, "n": self.n, "t": self.media},) if self.document else ()

    def subjects(self) -> tuple[str, ...]:
        """Return the cooler and every bottle that came out of it."""
        return (*super().subjects(), *(f"bottle:{code}" for code in self.numbers))
