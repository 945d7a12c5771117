"""Findings about the draws of a visit: a stand that was too short, bottles filled in each other's
place.

A bottle alone filled at another tap than the one it was printed for is no finding: it is the
deviation ``wrong-bottle`` of the draw it holds, and its result follows where it was filled.
"""

from collections.abc import Mapping, Sequence
from datetime import timedelta
from typing import Any

from fieldapp.domain.bottles import BottleStanding
from fieldapp.domain.protocols.standing import Deviation
from fieldapp.domain.reconcile import Finding

TOO_SHORT = ("stand-short", "tap-used-in-stand")


def short_stand(visit: str, deviations: Sequence[Deviation]) -> list[Finding]:
    """Return one finding where water certainly stood too short before a draw of the visit.

    Only what the recorded times show counts, and only where the longest stand that they allow is
    below the minimum: one that may have been long enough is a deviation and no finding, and so is
    a short stand that somebody states without times.
    """
    for one in deviations:
        longest, minimum = one.values.get("longest"), one.values.get("minimum")
        if not one.detected or one.kind not in TOO_SHORT:
            continue
        if isinstance(longest, timedelta) and isinstance(minimum, timedelta) and longest < minimum:
            # its last use and its draw; what somebody says of it later is no new evidence
            values = {"stood_s": _seconds(longest), "minimum_s": _seconds(minimum)}
            return [Finding("stand-too-short", f"visit:{visit}", one.evidence[:2], values)]
    return []


def swapped(
    told: BottleStanding, others: Sequence[BottleStanding], sites: Mapping[str, str]
) -> list[Finding]:
    """Return one finding for a pair of bottles that were filled in each other's place (R26).

    ``others`` are the bottles printed for the visit it was printed for and for the one it was
    filled at, itself among them or not; ``sites`` the site of each visit. The pair's finding is
    told with the bottle whose code sorts first.
    """
    home, away = _printed(told), filled_elsewhere(told)
    if not away or sites.get(home, home) == sites.get(away, away):
        return []
    every = {one.bottle: one for one in (told, *others)}.values()
    gone = sorted(_moved(every, home, away))
    come = sorted(_moved(every, away, home))
    for (_, one), (_, other) in zip(gone, come, strict=False):
        first, second = sorted((one, other))
        if told.bottle == first:
            return [_pair(told, next(o for o in every if o.bottle == second), sites)]
    return []


def filled_elsewhere(told: BottleStanding) -> str:
    """Return the visit at which a bottle was filled that was printed for another, else empty."""
    visits = {str(getattr(one.fact, "visit", "")) for one in told.fillings}
    if len(visits) != 1 or not _printed(told) or visits == {_printed(told)}:
        return ""
    return visits.pop()


def _moved(every: Any, home: str, away: str) -> list[tuple[int, str]]:
    """Return draw and code of each bottle printed for one visit and filled at another."""
    return [
        (one.plan.draw, one.bottle)
        for one in every
        if one.plan and _printed(one) == home and filled_elsewhere(one) == away
    ]


def _pair(one: BottleStanding, other: BottleStanding, sites: Mapping[str, str]) -> Finding:
    home, away = _printed(one), filled_elsewhere(one)
    evidence = tuple(sorted(e.hash for e in (*one.fillings, *other.fillings)))
    values = {
        "other": other.bottle,
        "printed": sites.get(home, home),
        "filled": sites.get(away, away),
    }
    return Finding("bottles-swapped", f"bottle:{one.bottle}", evidence, values)


def _printed(told: BottleStanding) -> str:
    return told.plan.visit if told.plan else ""


def _seconds(length: timedelta) -> int:
    return int(length.total_seconds())
