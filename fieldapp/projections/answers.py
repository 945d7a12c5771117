"""The official figure of a round: its bottles as candidates, then the rule's arithmetic."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date, datetime
from typing import Any
from zoneinfo import ZoneInfo

from fieldapp.domain import rules
from fieldapp.domain.levels import Level, read_level
from fieldapp.domain.rules import Answer, Candidate, Period, Rule
from fieldapp.domain.rules.answer import WAITING
from fieldapp.projections.pages import Pages, Row
from fieldapp.projections.rounds import deviations_on

PAIRED = frozenset({"lower-of-pair", "pair-incomplete", "lower-of-same-draw"})
"""Reasons of results that are in and were looked at, though another stands for their tap."""


@dataclass(frozen=True, slots=True)
class Figure:
    """One analyte's answer as a page heads it: how many of the expected results are in.

    ``running`` until all are in or the period is over (R10).
    """

    answer: Answer
    come: int
    expected: int
    running: bool


def period_of(row: Row) -> Period:
    """Return the days and months of a round."""
    first, last = date.fromisoformat(row["from_day"]), date.fromisoformat(row["to_day"])
    return Period(first, last, tuple(row["months"]))


def figures(pages: Pages, row: Row, now: datetime) -> list[Figure]:
    """Return the figure of each analyte that the round's rule limits, lead before copper."""
    rule = rules.load(row["rule"])
    period = period_of(row)
    given = candidates(pages, row, rule)
    over = now.astimezone(ZoneInfo(row["zone"])).date() > period.last
    return [
        figure(rules.official(rule, row["convention"], given, period, analyte), over=over)
        for analyte in rule.limits
    ]


def figure(answer: Answer, *, over: bool) -> Figure:
    """Return the figure with how many of its expected results have come."""
    waiting = [c for c, reason in answer.left_out if reason in WAITING]
    paired = sum(reason in PAIRED for _, reason in answer.left_out)
    come = answer.n + paired + sum(c.level is not None for c in waiting)
    expected = answer.n + paired + len(waiting)
    return Figure(answer, come, expected, running=bool(waiting) and not over)


def withheld(pages: Pages, round_id: str) -> dict[str, int]:
    """Count the bottles decided against before any result, by the direction of their bias (R8).

    ``either`` also stands for deviations that bend both ways, ``none`` for a bottle held for
    what the clerk saw.
    """
    visits = {visit["visit"]: visit for visit in pages.visits(round_id=round_id)}
    counts: dict[str, int] = {}
    for bottle in pages.bottles(round_id=round_id):
        if bottle["decided"] == "leave":
            found = {str(d["bias"]) for d in deviations_on(visits.get(bottle["visit"]), bottle)}
            bias = "none" if not found else found.pop() if len(found) == 1 else "either"
            counts[bias] = counts.get(bias, 0) + 1
    return counts


def candidates(pages: Pages, row: Row, rule: Rule) -> list[Candidate]:
    """Return a candidate for each bottle and analyte, those that came and those awaited."""
    visits = {visit["visit"]: visit for visit in pages.visits(round_id=row["round"])}
    zone = ZoneInfo(row["zone"])
    return [
        candidate(bottle, visits.get(bottle["visit"], {}), analyte, zone)
        for bottle in pages.bottles(round_id=row["round"])
        if (bottle["issued"] or bottle["filled"] or bottle["results"])
        for analyte in rule.limits
        if analyte in bottle["analyse"] or analyte in bottle["results"]
    ]


def candidate(bottle: Row, visit: Mapping[str, Any], analyte: str, zone: ZoneInfo) -> Candidate:
    """Return one bottle's place in the figure of one analyte."""
    result = bottle["results"].get(analyte)
    return Candidate(
        bottle=bottle["bottle"],
        site=bottle["site"],
        visit=bottle["visit"],
        draw=bottle["draw"],
        kind=bottle["kind"],
        purpose=bottle["purpose"],
        analyte=analyte,
        level=level_of(result) if result else None,
        collected_on=_local_day(bottle["filled_at"], zone),
        line=visit.get("line") or "",
        received=bottle["outcome"] in ("accepted", "held"),
        refused=bottle["outcome"] == "refused",
        decided_against=bottle["decided"] == "leave",
        breached=bool(deviations_on(visit, bottle)),
    )


def level_of(result: Mapping[str, Any]) -> Level:
    """Return the level that a reported result states, in µg/L."""
    qualifier, value = result.get("qualifier", ""), result.get("value", "")
    written = "ND" if qualifier == "ND" else f"{qualifier}{value}"
    return read_level(
        written,
        result["unit"],
        detection=result.get("detection"),
        reporting=result.get("reporting"),
    )


def _local_day(filled_at: str, zone: ZoneInfo) -> date | None:
    """Return the day on which it was filled by the clocks of the round."""
    return datetime.fromisoformat(filled_at).astimezone(zone).date() if filled_at else None
