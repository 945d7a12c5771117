"""Findings about a cooler: another seal, another count, a stretch that nobody kept it.

One cause, one finding. A count that differs by bottles which arrived nowhere is told by their own
``filled-not-received``, one that differs by bottles of another cooler by their ``other-cooler``.
"""

from datetime import timedelta
from typing import Any

from fieldapp.domain.custody import UNPACKED_WITHIN, CoolerStanding, gap_of, same_seals
from fieldapp.domain.facts import CoolerOpened
from fieldapp.domain.reconcile import DUE_WITHOUT_A_NAME, Finding


def about_cooler(
    told: CoolerStanding, *, due: timedelta | None = None, box: str = "", day: str = ""
) -> list[Finding]:
    """Return what does not agree about one cooler that the laboratory opened.

    ``due`` is the round's time from filling to receipt: so long a handover may be on a tablet that
    has not sent. ``box`` and ``day`` are the words by which pages name the cooler.
    """
    opening = told.opening
    if opening is None or not isinstance(opened := opening.fact, CoolerOpened):
        return []
    named = {"box": box, "day": day}
    return [
        *_seal(told, opened, named),
        *_count(told, opened, named),
        *_gap(told, due if due is not None else DUE_WITHOUT_A_NAME, named),
    ]


def _seal(told: CoolerStanding, opened: CoolerOpened, named: dict[str, Any]) -> list[Finding]:
    """Find seals that are not those last put on; whether they were whole is told beside it."""
    if told.sealing is None or same_seals(opened.seal_read, told.seals):
        return []
    assert told.opening is not None
    return [
        Finding(
            "seal-differs",
            f"cooler:{told.cooler}",
            (told.sealing.hash, told.opening.hash),
            {
                **named,
                "put_on": list(told.seals),
                "read": list(opened.seal_read),
                "whole": "seal-whole" if opened.whole else "seal-not-whole",
            },
        )
    ]


def _count(told: CoolerStanding, opened: CoolerOpened, named: dict[str, Any]) -> list[Finding]:
    """Find a count that is not the record's, unless missing bottles tell the same.

    While bottles are still coming out of it, it waits: a count of 16 where 17 were packed may
    become one bottle that is missing.
    """
    packed, opening = len(told.bottles), told.opening
    assert opening is not None
    expected = packed - len(told.elsewhere) + len(told.strayed)
    if not packed or opened.count in (packed, expected):
        return []
    if told.scanned_empty and _missing_tell_it(told, expected - opened.count):
        return []
    at = opening.done_at if told.scanned_empty else opening.done_at + UNPACKED_WITHIN
    values = {**named, "counted": opened.count, "packed": packed}
    evidence = (opening.hash, *(one.hash for one in told.packed))
    return [Finding("count-differs", f"cooler:{told.cooler}", evidence, values, at)]


def _missing_tell_it(told: CoolerStanding, fewer: int) -> bool:
    """Say whether the bottles that arrived nowhere are all of those counted too few.

    Each must hold water by the record, or no finding of its own would speak of it.
    """
    strange = told.out - set(told.bottles) - told.strayed
    return fewer == len(told.missing) and not strange and set(told.missing) <= told.filled


def _gap(told: CoolerStanding, within: timedelta, named: dict[str, Any]) -> list[Finding]:
    """Find the one gap in its custody, with its two ends.

    A handover that nobody recorded is known to be missing only when the record could be here.
    """
    gap = gap_of(told)
    if gap is None:
        return []
    values = {**named, "why": gap.why, "since": gap.since, "until": gap.until}
    evidence = tuple(sorted(one.hash for one in gap.evidence))
    opens_at = None if gap.sure else gap.until + within
    return [Finding("custody-gap", f"cooler:{told.cooler}", evidence, values, opens_at)]
