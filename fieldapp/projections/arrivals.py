"""Coolers as the counter sees them: what was packed, what was read when one was opened, what is in.

The record's side is the cooler's summary row; openings and receipts come from the facts about it.
"""

import json
from collections.abc import Collection
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from fieldapp.domain.bottles import in_order
from fieldapp.domain.custody import plain_seal
from fieldapp.domain.facts import BottleReceived, CoolerOpened
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections import facts
from fieldapp.projections.pages import Pages, Row


@dataclass(frozen=True, slots=True)
class Arrival:
    """One cooler: what its record says and what the counter saw, both as they stand now.

    ``packed`` are the codes that the tablet put in, ``seals`` those on it when it set out, ``day``
    the route's; ``openings`` are the living openings and ``receipts`` the living receipts that
    name this cooler, oldest first.
    """

    cooler: str
    route: str
    box: str
    day: str
    packed: tuple[str, ...]
    seals: tuple[str, ...]
    relinquished_at: str
    openings: tuple[Recorded, ...]
    receipts: tuple[Recorded, ...]
    stated: bool

    @property
    def recorded(self) -> bool:
        """Whether a tablet's record of it is here."""
        return bool(self.packed or self.seals)

    @property
    def opened(self) -> CoolerOpened | None:
        """What was read at its latest opening."""
        found = self.openings[-1].fact if self.openings else None
        return found if isinstance(found, CoolerOpened) else None

    @property
    def opened_at(self) -> datetime | None:
        """When it was opened here."""
        return self.openings[-1].done_at if self.openings else None

    @property
    def received(self) -> tuple[str, ...]:
        """The codes received in it, each once."""
        codes = (one.fact.bottle for one in self.receipts if isinstance(one.fact, BottleReceived))
        return tuple(dict.fromkeys(codes))

    @property
    def expected(self) -> int:
        """How many bottles are awaited: as packed, else as counted at the opening."""
        if self.packed:
            return len(self.packed)
        return self.opened.count if self.opened else 0


def arrival(pages: Pages, cooler: str) -> Arrival:
    """Return that cooler as it stands; one that nobody named has nothing in it."""
    row: Row = pages.row("SELECT * FROM p_cooler WHERE cooler = ?", (cooler,)) or {}
    kinds = ("cooler.opened", "bottle.received")
    entries = in_order(facts.about(pages.db, f"cooler:{cooler}", kinds))
    return Arrival(
        cooler=cooler,
        route=str(row.get("route") or ""),
        box=str(row.get("box") or ""),
        day=str(row.get("day") or ""),
        packed=tuple(_listed(row.get("bottles"))),
        seals=tuple(_listed(row.get("seals"))),
        relinquished_at=str(row.get("relinquished_at") or ""),
        openings=tuple(e for e in entries if isinstance(e.fact, CoolerOpened)),
        receipts=tuple(e for e in entries if isinstance(e.fact, BottleReceived)),
        stated=bool(row.get("stated_at")),
    )


def packed_in(pages: Pages, bottle: str) -> str:
    """Return the cooler that a bottle was last packed into, empty for none."""
    row = pages.bottle(bottle)
    return str(row["cooler"]) if row else ""


def on_the_road(pages: Pages) -> list[Arrival]:
    """Return the coolers that a tablet packed and no laboratory received, the latest first."""
    rows = pages.rows(
        "SELECT cooler FROM p_cooler WHERE state != 'received'"
        " ORDER BY day DESC, last_sealed_at DESC, box"
    )
    return [arrival(pages, str(row["cooler"])) for row in rows]


def opened_since(pages: Pages, since: datetime) -> list[Arrival]:
    """Return the coolers opened since then, the latest first."""
    rows = pages.rows(
        "SELECT cooler FROM p_cooler WHERE opened_at >= ? ORDER BY opened_at DESC", (text(since),)
    )
    return [arrival(pages, str(row["cooler"])) for row in rows]


def bearing(pages: Pages, seals: Collection[str]) -> list[Arrival]:
    """Return the coolers on which one of those seals was put, or read at their opening."""
    wanted = {plain_seal(seal) for seal in seals}
    rows = pages.rows("SELECT cooler, seals, seal_read FROM p_cooler ORDER BY cooler")
    return [
        arrival(pages, str(row["cooler"]))
        for row in rows
        if wanted & {plain_seal(s) for s in (*_listed(row["seals"]), *_listed(row["seal_read"]))}
    ]


def _listed(written: Any) -> list[str]:
    """Return a JSON list, read by ``Pages`` already or not."""
    return list(json.loads(written) if isinstance(written, str) else written or ())
