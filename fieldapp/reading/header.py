"""The round's own fields in a round file: rule, convention, zone, period, laboratory."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from functools import cache
from importlib.resources import files

from fieldapp.domain import rules
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import RoundOpened
from fieldapp.domain.percentile import CONVENTIONS
from fieldapp.domain.timetext import parse_duration, zone_named
from fieldapp.reading.part import Part
from fieldapp.words import N_

_ROUND_KEYS = (
    "id",
    "title",
    "rule",
    "convention",
    "convention_by",
    "zone",
    "from",
    "to",
    "months",
    "laboratory",
    "due",
    "keep_poured",
)


@dataclass(frozen=True, slots=True)
class Header:
    """The round with no protocols yet; ``first`` and ``last`` are None where they were faulty."""

    round: RoundOpened
    first: date | None = None
    last: date | None = None


def read_header(part: Part | None) -> Header:
    """Return the round's own fields, empty where they had faults."""
    if part is None:
        return Header(_nothing())
    part.only(*_ROUND_KEYS)
    first, last = _period(part)
    months = part.wholes("months", 1, 12)
    _check_months(part, months, first, last)
    laboratory, laboratory_title = _laboratory(part.block("laboratory"))
    opened = RoundOpened(
        round=part.id("id"),
        title=part.text("title"),
        rule=part.word("rule", tuple(rule.id for rule in rules.all_rules()), "no-rule"),
        convention=part.word("convention", tuple(CONVENTIONS), "no-convention"),
        convention_by=part.text("convention_by", optional=True),
        zone=_zone(part),
        from_=iso(first),
        to=iso(last),
        months=months,
        laboratory=laboratory,
        laboratory_title=laboratory_title,
        due=_due(part),
        keep_poured=part.flag("keep_poured"),
        protocols={},
    )
    _note_rule(part, opened, first, last)
    return Header(opened, first, last)


def _period(part: Part) -> tuple[date | None, date | None]:
    first, last = part.day("from"), part.day("to")
    if first and last and last < first:
        part.fault("reversed", "to", last, first=first)
        return None, None
    return first, last


def _check_months(part: Part, months: Sequence[int], first: date | None, last: date | None) -> None:
    if not (months and first and last) or (last - first).days > 366:
        return
    days = (first + timedelta(n) for n in range((last - first).days + 1))
    if not {day.month for day in days} & set(months):
        part.fault("no-month-counts", "months", tuple(months), first=first, last=last)


def _laboratory(part: Part | None) -> tuple[str, str]:
    if part is None:
        return "", ""
    part.only("id", "title")
    return part.id("id"), part.text("title")


def _zone(part: Part) -> str:
    zone = part.text("zone", right=N_("a time zone such as America/Boise"))
    if not zone:
        return ""
    if zone not in _zones():
        part.fault("no-zone", "zone", zone, right=_near(zone))
        return ""
    try:
        zone_named(zone)
    except RuleBroken:
        part.fault("no-zone", "zone", zone, right="America/Boise")
        return ""
    return zone


@cache
def _zones() -> frozenset[str]:
    # The list that is the same on every machine, whatever its own database holds besides.
    names = files("tzdata").joinpath("zones").read_text("utf-8").split()
    return frozenset(name for name in names if "/" in name or name == "UTC")


def _near(zone: str) -> str:
    """Return the zone that somebody may have meant: the same place, another case or blank."""
    wanted = zone.casefold().replace(" ", "_")
    for name in sorted(_zones()):
        if wanted in (name.casefold(), name.rpartition("/")[2].casefold()):
            return name
    return "America/Boise"


def _due(part: Part) -> str:
    due = part.text("due", optional=True)
    try:
        if due and parse_duration(due) <= timedelta(0):
            part.fault("bad-duration", "due", due)
    except RuleBroken:
        part.fault("bad-duration", "due", due)
    return due


def _note_rule(part: Part, opened: RoundOpened, first: date | None, last: date | None) -> None:
    if not opened.rule:
        return
    rule = rules.load(opened.rule)
    if opened.convention and opened.convention != rule.convention and not opened.convention_by:
        part.note("convention-unsigned", "convention", opened.convention, right=rule.convention)
    if first and last and not (rule.in_force_on(first) and rule.in_force_on(last)):
        within = window(rule.in_force_from, rule.in_force_to)
        part.note("rule-outside-in-force", "rule", rule.id, **within)


def window(first: date | None, last: date | None) -> dict[str, str]:
    return {"first": iso(first) or "…", "last": iso(last) or "…"}


def iso(day: date | None) -> str:
    return day.isoformat() if day else ""


def _nothing() -> RoundOpened:
    return RoundOpened(
        round="",
        title="",
        rule="",
        convention="",
        zone="",
        from_="",
        to="",
        months=(),
        laboratory="",
        protocols={},
    )
