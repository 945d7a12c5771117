"""The official figure of one analyte: what entered it, at which level, what did not and why."""

import datetime
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

from fieldapp.domain.levels import Level
from fieldapp.domain.percentile import CONVENTIONS, UnknownConvention, exceeds, ninetieth
from fieldapp.domain.rules.model import PERCENTILE, Counts, Limit, NonDetects, Rule

COMPLIANCE = "compliance"

Reason = Literal[
    "blank",
    "duplicate",
    "not-compliance",
    "draw-not-counted",
    "invalidated",
    "superseded",
    "not-analysed",
    "breach",
    "refused",
    "not-received",
    "no-result",
    "date-unknown",
    "outside-period",
    "outside-months",
    "pair-incomplete",
    "lower-of-pair",
    "lower-of-same-draw",
]
RankedAs = Literal["measured", "below-detection", "less-than", "limit", "half-pql"]

# Reasons that a coming result or record may lift.
WAITING = frozenset({"no-result", "not-received", "date-unknown"})


@dataclass(frozen=True, slots=True)
class Candidate:
    """One bottle's result for one analyte, or its place while there is none.

    ``level`` is None without a result; ``collected_on`` is the local date of filling, None if
    not known. ``decided_against`` was decided before any result existed; ``invalidated`` was
    written by the regulator; ``superseded`` says another result of this bottle took its place.
    """

    bottle: str
    site: str
    visit: str
    draw: int
    kind: str
    purpose: str
    analyte: str
    level: Level | None
    collected_on: datetime.date | None
    line: str = ""
    received: bool = True
    refused: bool = False
    decided_against: bool = False
    invalidated: bool = False
    superseded: bool = False
    breached: bool = False


@dataclass(frozen=True, slots=True)
class Period:
    """The days of a round, both counted, and the months that count; no months means all."""

    first: datetime.date
    last: datetime.date
    months: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True)
class Entered:
    """A result in the figure, at ``ranked_ug_per_l``; ``ranked_as`` says how that was chosen."""

    candidate: Candidate
    ranked_ug_per_l: Decimal
    ranked_as: RankedAs


@dataclass(frozen=True, slots=True)
class Answer:
    """The official figure of one analyte, with all that stands behind it. Levels are in µg/L.

    ``value`` and ``rank`` are None when nothing entered, or when the rule knows no percentile;
    then ``exceeds`` is None too. ``above`` counts the entered results above the limit.
    """

    rule: str
    analyte: str
    value: Decimal | None
    n: int
    rank: Decimal | None
    convention: str
    limit: Decimal
    exceeds: bool | None
    above: int
    entered: tuple[Entered, ...]
    left_out: tuple[tuple[Candidate, Reason], ...]

    @property
    def waiting(self) -> int:
        """Count the bottles that may still bring a result into the figure."""
        return sum(reason in WAITING for _, reason in self.left_out)


def official(
    rule: Rule, convention: str, inputs: Sequence[Candidate], period: Period, analyte: str
) -> Answer:
    """Return the official figure of ``analyte``; the order of ``inputs`` makes no difference.

    Nothing is dropped in silence: every candidate of the analyte is entered or left out with
    its reason. ``convention`` is the round's, the rule's own where the round names none.

    Raises:
        Unknown: The rule has no limit for the analyte.
        UnknownConvention: The convention is none that a round may name.
    """
    if convention not in CONVENTIONS:
        raise UnknownConvention(convention=convention, known=tuple(CONVENTIONS))
    limit = rule.limit(analyte)
    entered, left_out = _sorted_out(
        rule, period, limit, [c for c in inputs if c.analyte == analyte]
    )
    levels = [one.ranked_ug_per_l for one in entered]
    found = ninetieth(levels, convention) if rule.judges == PERCENTILE else None
    return Answer(
        rule=rule.id,
        analyte=analyte,
        value=found.value if found else None,
        n=len(levels),
        rank=found.rank if found else None,
        convention=convention,
        limit=limit.ug_per_l,
        exceeds=exceeds(found.value, limit.ug_per_l) if found else None,
        above=sum(exceeds(level, limit.ug_per_l) for level in levels),
        entered=tuple(entered),
        left_out=tuple(left_out),
    )


def ranked(level: Level, policy: NonDetects, pql: Decimal) -> tuple[Decimal, RankedAs]:
    """Return at which level in µg/L a result is ranked, and how that was chosen.

    A laboratory's zero is its word for "below detection" and stays zero. ``<x`` follows the
    policy, one for an x up to the quantitation level and one above it.
    """
    if level.value is None:
        return Decimal(0), "below-detection"
    if level.qualifier == "<":
        way = policy.less_than if level.value <= pql else policy.less_than_above_pql
        return (Decimal(0), "less-than") if way == "zero" else (level.value, "limit")
    if level.value == 0 or (level.detection is not None and level.value < level.detection):
        return Decimal(0), "below-detection"
    if policy.between == "half-pql" and level.value < pql:
        return pql / 2, "half-pql"
    return level.value, "measured"


_LeftOut = list[tuple[Candidate, Reason]]


def _sorted_out(
    rule: Rule, period: Period, limit: Limit, candidates: list[Candidate]
) -> tuple[list[Entered], _LeftOut]:
    entered: list[Entered] = []
    left_out: _LeftOut = []
    visits: dict[tuple[str, str], list[Entered]] = defaultdict(list)
    for candidate in candidates:
        reason = _reason(rule, period, candidate)
        if reason or candidate.level is None:
            left_out.append((candidate, reason or "no-result"))
            continue
        level, how = ranked(candidate.level, rule.nondetects, limit.pql_ug_per_l)
        visits[candidate.site, candidate.visit].append(Entered(candidate, level, how))
    for drawn in visits.values():
        values, others = _values(rule, drawn)
        entered += values
        left_out += others
    entered.sort(key=lambda one: (one.ranked_ug_per_l, _place(one.candidate)))
    left_out.sort(key=lambda pair: _place(pair[0]))
    return entered, left_out


def _reason(rule: Rule, period: Period, candidate: Candidate) -> Reason | None:
    """Return the first reason for which a candidate cannot enter, whatever else was drawn."""
    return (
        _by_purpose(rule, candidate)
        or _by_decision(rule, candidate)
        or _by_absence(candidate)
        or _by_date(period, candidate)
    )


def _by_purpose(rule: Rule, candidate: Candidate) -> Reason | None:
    if "blank" in (candidate.purpose, candidate.kind):
        return "blank"
    if "duplicate" in (candidate.purpose, candidate.kind):
        return "duplicate"
    if candidate.purpose != COMPLIANCE:
        return "not-compliance"
    counts = rule.counts_for(candidate.analyte, candidate.line)
    if not counts or candidate.draw not in counts.draws or candidate.kind not in counts.kinds:
        return "draw-not-counted"
    return None


def _by_decision(rule: Rule, candidate: Candidate) -> Reason | None:
    if candidate.invalidated:
        return "invalidated"
    if candidate.superseded:
        return "superseded"
    if candidate.decided_against:
        return "not-analysed"
    if candidate.breached and not rule.breach_counts:
        return "breach"
    return None


def _by_absence(candidate: Candidate) -> Reason | None:
    if candidate.level is not None:
        # What was analysed counts, even if the bottle should have been refused (R9).
        return None
    if candidate.refused:
        return "refused"
    return "no-result" if candidate.received else "not-received"


def _by_date(period: Period, candidate: Candidate) -> Reason | None:
    day = candidate.collected_on
    if day is None:
        return "date-unknown"
    if not period.first <= day <= period.last:
        return "outside-period"
    if period.months and day.month not in period.months:
        return "outside-months"
    return None


def _values(rule: Rule, drawn: list[Entered]) -> tuple[list[Entered], _LeftOut]:
    """Return what one visit gives: one value for each draw, or one for all where a pair counts."""
    first = drawn[0].candidate
    counts = rule.counts_for(first.analyte, first.line)
    best, left_out = _best_of_each_draw(drawn)
    if counts is None or counts.take == "each":
        return list(best.values()), left_out
    return _highest(counts, best, left_out)


def _best_of_each_draw(drawn: list[Entered]) -> tuple[dict[int, Entered], _LeftOut]:
    """Keep the highest of two results of one draw.

    One litre gives one value; which of two is right is a finding for a person, and until then
    the higher stands. Our choice, no source; from memory, check.
    """
    best: dict[int, Entered] = {}
    left_out: _LeftOut = []
    for one in sorted(drawn, key=lambda one: (-one.ranked_ug_per_l, _place(one.candidate))):
        if one.candidate.draw in best:
            left_out.append((one.candidate, "lower-of-same-draw"))
        else:
            best[one.candidate.draw] = one
    return best, left_out


def _highest(
    counts: Counts, best: dict[int, Entered], left_out: _LeftOut
) -> tuple[list[Entered], _LeftOut]:
    """Return the highest of a pair; half a pair is none, and nothing stands in for it (R20)."""
    if set(best) < set(counts.draws):
        return [], left_out + [(one.candidate, "pair-incomplete") for one in best.values()]
    value = max(best.values(), key=lambda one: (one.ranked_ug_per_l, -one.candidate.draw))
    lower = [one for one in best.values() if one is not value]
    return [value], left_out + [(one.candidate, "lower-of-pair") for one in lower]


def _place(candidate: Candidate) -> tuple[str, str, int, str]:
    return candidate.site, candidate.visit, candidate.draw, candidate.bottle
