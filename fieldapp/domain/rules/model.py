"""A rule document: what a jurisdiction counts, against which limits, from when to when."""

import datetime
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal

from fieldapp.domain.errors import Unknown
from fieldapp.domain.percentile import CONVENTIONS
from fieldapp.domain.rules.keys import BadRule, Keys

PERCENTILE = "90th percentile"
JUDGES = (PERCENTILE, "each result", "mean of draws")
TAKES = ("each", "highest")
LESS_THAN = ("zero", "limit")


@dataclass(frozen=True, slots=True)
class Limit:
    """An analyte's limit and practical quantitation level, both in µg/L."""

    ug_per_l: Decimal
    pql_ug_per_l: Decimal
    source: str


@dataclass(frozen=True, slots=True)
class Counts:
    """Which draws give a site's value.

    ``take`` is ``each`` (every one is a value) or ``highest`` (all of ``draws`` must be there,
    the highest is the value). ``lines`` names the service lines it holds for, empty for any.
    """

    analytes: tuple[str, ...]
    lines: tuple[str, ...]
    draws: tuple[int, ...]
    kinds: tuple[str, ...]
    take: str
    source: str

    def fits(self, analyte: str, line: str) -> bool:
        """Say whether it holds for an analyte at a site with such a service line."""
        at_line = not self.lines or line.strip().casefold() in self.lines
        return analyte in self.analytes and at_line


@dataclass(frozen=True, slots=True)
class NonDetects:
    """At which level a result is ranked that the laboratory could not fully measure."""

    below_detection: str
    between: str
    less_than: str
    less_than_above_pql: str
    source: str


@dataclass(frozen=True, slots=True)
class Minimum:
    """How many sites a system serving more than ``people_over`` people must sample."""

    people_over: int
    standard: int
    reduced: int


@dataclass(frozen=True, slots=True)
class Rule:
    """One rule document. ``breach_counts`` says whether a breach of protocol still counts (R9)."""

    id: str
    title: str
    source: str
    in_force_from: datetime.date | None
    in_force_to: datetime.date | None
    judges: str
    convention: str
    convention_note: str
    convention_source: str
    limits: Mapping[str, Limit]
    counts: tuple[Counts, ...]
    nondetects: NonDetects
    breach_counts: bool
    breach_source: str
    minimum: tuple[Minimum, ...]
    not_reckoned: tuple[str, ...]

    def in_force_on(self, day: datetime.date) -> bool:
        """Say whether the rule binds on that day; outside it is not refused, only said."""
        begun = self.in_force_from is None or self.in_force_from <= day
        return begun and (self.in_force_to is None or day <= self.in_force_to)

    def limit(self, analyte: str) -> Limit:
        """Return the limit of an analyte.

        Raises:
            Unknown: The rule has none for it.
        """
        if analyte not in self.limits:
            raise Unknown(what="analyte", name=analyte)
        return self.limits[analyte]

    def counts_for(self, analyte: str, line: str) -> Counts | None:
        """Return what counts for an analyte at a site with that service line, None if nothing."""
        return next((c for c in self.counts if c.fits(analyte, line)), None)

    def sites_needed(self, people: int, *, reduced: bool = False) -> int:
        """Return how many sites a system serving so many people must sample in a period."""
        rows = (row for row in self.minimum if people > row.people_over)
        row = next(rows, self.minimum[-1])
        return row.reduced if reduced else row.standard


def parse(toml: str) -> Rule:
    """Return the rule that a TOML document states.

    Raises:
        BadRule: It is no TOML, lacks a key, has one that means nothing, or a value out of place.
    """
    try:
        keys = Keys(tomllib.loads(toml))
    except tomllib.TOMLDecodeError as fault:
        raise BadRule(path="", why="toml", value=str(fault)) from None
    rule = _rule(keys)
    keys.done()
    return rule


def _rule(keys: Keys) -> Rule:
    begins, ends = _in_force(keys.table("in_force"))
    breach_counts, breach_source = _breaches(keys.table("breaches"))
    return Rule(
        id=keys.text("id"),
        title=keys.text("title"),
        source=keys.text("source"),
        in_force_from=begins,
        in_force_to=ends,
        judges=keys.text("judges", JUDGES),
        convention=keys.text("convention", tuple(CONVENTIONS)),
        convention_note=keys.text("convention_note"),
        convention_source=keys.text("convention_source"),
        limits=_limits(keys.table("limits")),
        counts=tuple(_counts(table) for table in keys.tables("counts")),
        nondetects=_nondetects(keys.table("nondetects")),
        breach_counts=breach_counts,
        breach_source=breach_source,
        minimum=_minimum(keys),
        not_reckoned=keys.texts("not_reckoned", optional=True),
    )


def _in_force(keys: Keys) -> tuple[datetime.date | None, datetime.date | None]:
    begins, ends = keys.day("from"), keys.day("to")
    keys.done()
    if begins and ends and ends < begins:
        raise BadRule(path=keys.path("to"), why="form", value=ends, wanted=f"{begins} or later")
    return begins, ends


def _limits(keys: Keys) -> dict[str, Limit]:
    limits = {}
    for analyte in keys.names():
        table = keys.table(analyte)
        limits[analyte] = Limit(
            table.decimal("ug_per_l"), table.decimal("pql_ug_per_l"), table.text("source")
        )
        table.done()
    return limits


def _counts(keys: Keys) -> Counts:
    counts = Counts(
        analytes=keys.texts("analytes"),
        lines=tuple(line.casefold() for line in keys.texts("lines", optional=True)),
        draws=keys.wholes("draws"),
        kinds=keys.texts("kinds"),
        take=keys.text("take", TAKES),
        source=keys.text("source"),
    )
    keys.done()
    return counts


def _nondetects(keys: Keys) -> NonDetects:
    policy = NonDetects(
        below_detection=keys.text("below_detection", ("zero",)),
        between=keys.text("between", ("as-measured", "half-pql")),
        less_than=keys.text("less_than", LESS_THAN),
        less_than_above_pql=keys.text("less_than_above_pql", LESS_THAN),
        source=keys.text("source"),
    )
    keys.done()
    return policy


def _breaches(keys: Keys) -> tuple[bool, str]:
    counts, source = keys.flag("count"), keys.text("source")
    keys.done()
    return counts, source


def _minimum(keys: Keys) -> tuple[Minimum, ...]:
    rows = []
    for table in keys.tables("minimum"):
        rows.append(
            Minimum(table.whole("people_over"), table.whole("standard"), table.whole("reduced"))
        )
        table.done()
    falling = sorted(rows, key=lambda row: row.people_over, reverse=True)
    if falling[-1].people_over != 0:
        raise BadRule(path=keys.path("minimum"), why="missing", value="", wanted="people_over = 0")
    return tuple(falling)
