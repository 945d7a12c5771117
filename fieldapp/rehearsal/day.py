"""A rehearsed day: what the form walker does at each visit and what the laboratory reports."""

import csv
import io
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal

from fieldapp.domain.timetext import to_utc, zone_named
from fieldapp.reading.faults import Note

# Where the block says nothing: our choice.
BEGINS = "06:00"
FIRST_NUMBER = "L-0001"

_LAST_DIGITS = re.compile(r"(\d+)(\D*)$", re.ASCII)


@dataclass(frozen=True, slots=True)
class LastUse:
    """What the resident says of the last use of water.

    ``at`` and ``to`` are times of day, or else ``hours_before`` counts from the arrival.
    """

    exact: str = "at"
    where: str = "this-tap"
    at: str = ""
    to: str = ""
    hours_before: Decimal | None = Decimal(8)

    def moments(self, arrival: datetime, zone: str) -> tuple[datetime, datetime] | None:
        """Return from when to when, in UTC, both the same unless *between*; None of unknown.

        ``arrival`` is aware; a time of day means its latest occurrence before that.
        """
        if self.exact == "unknown":
            return None
        if self.hours_before is not None and not self.at:
            milliseconds = int(self.hours_before * 3_600_000)
            moment = arrival.astimezone(UTC) - timedelta(milliseconds=milliseconds)
            return moment, moment
        latest = _latest(self.to or self.at, arrival, zone)
        return _latest(self.at, latest, zone), latest


@dataclass(frozen=True, slots=True)
class Photo:
    """A picture that is taken at a visit: of a bottle by its draw, 0 for the visit itself."""

    draw: int = 0
    says: str = ""


@dataclass(frozen=True, slots=True)
class VisitScript:
    """What happens at one visit, as far as it is not as expected.

    ``waits``: ``here`` or ``away``, or ``not``: the draws are made before their stand is over.
    ``swapped`` names the visit whose bottles were taken here, as this one's were there.
    ``left_behind`` names the draws whose full bottles are never packed.
    """

    visit: str
    arrives: str = ""
    waits: str = "here"
    last_use: LastUse = LastUse()
    answers: Mapping[str, str] = field(default_factory=dict)
    fill: Mapping[int, str] = field(default_factory=dict)
    photos: tuple[Photo, ...] = ()
    swapped: str = ""
    left_behind: frozenset[int] = frozenset()

    def fill_of(self, draw: int) -> str:
        """Return how full the bottle of that draw got."""
        return self.fill.get(draw, "line")


@dataclass(frozen=True, slots=True)
class Load:
    """One load of a cooler: what goes in, its seals, who takes it, what the Bench reads.

    ``visits`` whose bottles are scanned into it; without any, it takes all that are left.
    ``taken_by`` is a person of the file; ``bench_reads`` the seals where they are read otherwise.
    """

    route: str
    box: str
    seals: tuple[str, ...]
    visits: tuple[str, ...] = ()
    to: str = "laboratory"
    taken_by: str = ""
    bench_reads: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Report:
    """How the laboratory reports one analyte: unit, limits, method, day."""

    analyte: str
    unit: str
    detection: str = ""
    reporting: str = ""
    method: str = ""
    analysed_at: str = ""


@dataclass(frozen=True, slots=True)
class Script:
    """The whole rehearsal of a round file."""

    begins: str = BEGINS
    laboratory_number: str = FIRST_NUMBER
    visits: Mapping[str, VisitScript] = field(default_factory=dict)
    loads: tuple[Load, ...] = ()
    reports: Mapping[str, Report] = field(default_factory=dict)
    results: Mapping[tuple[str, int, str], str] = field(default_factory=dict)
    notes: tuple[Note, ...] = ()

    def visit(self, visit: str) -> VisitScript:
        """Return what happens at that visit."""
        return self.visits.get(visit, VisitScript(visit))

    def begins_at(self, day: date, zone: str) -> datetime:
        """Return the moment in UTC at which the day begins."""
        return at_local(day, self.begins, zone)

    def arrives_at(self, visit: str, day: date, zone: str) -> datetime | None:
        """Return the moment in UTC before which nobody is at that door, None: at any time."""
        arrives = self.visit(visit).arrives
        return at_local(day, arrives, zone) if arrives else None

    def number(self, place: int) -> str:
        """Return the laboratory's number of the bottle in that place of receipt, from 0."""
        found = _LAST_DIGITS.search(self.laboratory_number)
        if found is None:
            return f"{self.laboratory_number}-{place + 1}"
        counted = str(int(found[1]) + place).zfill(len(found[1]))
        return self.laboratory_number[: found.start()] + counted + found[2]

    def results_csv(self, received: Mapping[tuple[str, int], tuple[str, str]]) -> str:
        """Return the laboratory's file: a row a result of a bottle that was received.

        ``received`` holds code and laboratory number (one may be empty) by visit and draw.
        """
        table = io.StringIO()
        writer = csv.writer(table, lineterminator="\n")
        writer.writerow(RESULTS_HEADER)
        for (visit, draw, analyte), value in self.results.items():
            if (visit, draw) in received:
                report = self.reports[analyte]
                limits = (report.detection, report.reporting)
                row = (analyte, value, report.unit, *limits, report.method, report.analysed_at)
                writer.writerow((*received[visit, draw], *row))
        return table.getvalue()


RESULTS_HEADER = (
    "bottle",
    "laboratory_number",
    "analyte",
    "value",
    "unit",
    "detection",
    "reporting",
    "method",
    "analysed_at",
)


def at_local(day: date, time: str, zone: str) -> datetime:
    """Return the moment in UTC of a local time of day; of two such moments the first."""
    return to_utc(f"{day.isoformat()}T{time}", zone, fold=0)


def _latest(time: str, before: datetime, zone: str) -> datetime:
    """Return the latest moment at or before ``before`` at which clocks showed ``time``."""
    today = before.astimezone(zone_named(zone)).date()
    days = (today - timedelta(days=n) for n in range(3))
    return next(at for at in (at_local(day, time, zone) for day in days) if at <= before)
