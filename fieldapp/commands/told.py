"""What the counter is told of one bottle as its record stands now."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from fieldapp.projections.pages import Pages, Row
from fieldapp.projections.rounds import deviations_on


@dataclass(frozen=True, slots=True)
class Said:
    """The counter's answer: a word (``in``, ``hold``, ``stop``), why, and named values."""

    word: str
    why: str
    deviations: tuple[Mapping[str, Any], ...] = ()


def said_of(pages: Pages, row: Row | None, *, again: bool = False) -> Said:
    """Return what the counter is told of a bottle as its record stands now (R7, R8)."""
    if row is None or not row["received_at"]:
        return Said("stop", "not-here")
    if row["outcome"] == "refused":
        return Said("stop", "refused-again" if again else "refused")
    against = deviations_of(pages, row)
    if row["decided"]:
        analyse = row["decided"] == "analyse"
        return Said("in", "to-analyse", against) if analyse else Said("hold", "to-leave", against)
    if row["outcome"] == "held":
        return Said("hold", _why_held(row, against), against)
    if against and not row["results"]:
        # its record came after the receipt; the Desk decides all the same (R8)
        return Said("hold", "deviation", against)
    if again:
        return Said("in", "again")
    return Said("in", "in" if row["filled"] else "not-filled")


def _why_held(row: Row, against: Sequence[Mapping[str, Any]]) -> str:
    if not known(row):
        return "unknown"
    if row["voided"]:
        return "voided"
    return "deviation" if against else "held"


def known(row: Row | None) -> bool:
    """Say whether this node holds the issue of that code."""
    return row is not None and bool(row["printed_for"] or row["spare"])


def deviations_of(pages: Pages, row: Row | None) -> tuple[Mapping[str, Any], ...]:
    """Return the deviations of its visit that bear on this bottle."""
    if row is None or not row["visit"]:
        return ()
    return deviations_on(pages.visit(row["visit"]), row)
