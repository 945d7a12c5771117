"""The ``rehearsal`` block of a route file: what the form walker does and the laboratory says.

The block, all of it optional (times are local to the round, ``HH:MM``)::

    "rehearsal": {
      "begins": "05:30",                  the clock at the start of the route's day
      "laboratory_number": "W27-0401",    the first number; the next ones count its digits up
      "visits": [{
        "id": "V-0401",
        "arrives": "05:40",               no earlier than this at the door
        "waits": "away",                  "away": leave and come back, "here": stay (the default)
        "last_use": {"at": "22:30", "exact": "about", "where": "bath"},
                                          the latest 22:30 before the arrival; or
                    {"hours_before": "7.5", "exact": "at", "where": "this tap"}
                    {"at": "22:00", "to": "23:00", "exact": "between", "where": "bath"}
                    {"exact": "unknown", "where": "this tap"}
        "answers": {"filter": "no"},      only where not the expected answer
        "fill": {"1": "below"}            by draw, only where not "line"
      }],
      "reports": [{"analyte": "lead", "unit": "ug/L", "detection": "0.3", "reporting": "1",
                   "method": "EPA 200.8", "analysed_at": "2027-05-07"}],
      "results": [{"visit": "V-0401", "draw": 1, "analyte": "lead", "value": "<1"}]
    }

A visit that the block does not name was last used eight hours before the arrival, and all else
is as expected. A draw without a result stays without one.
"""

import csv
import io
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal

from fieldapp.domain.timetext import to_utc, zone_named
from fieldapp.reading.faults import Findings, Note
from fieldapp.reading.part import Part, read_json
from fieldapp.reading.rounds import RoundFile
from fieldapp.words import N_

EXACT = ("at", "about", "between", "unknown")
WAITS = ("here", "away")
FILLS = ("line", "below", "over", "spilled")
ANALYTES = ("lead", "copper")

# Where the block says nothing: our choice.
BEGINS = "06:00"
FIRST_NUMBER = "L-0001"

_TIME = re.compile(r"([01]\d|2[0-3]):[0-5]\d", re.ASCII)
_HOURS = re.compile(r"\d{1,3}(\.\d{1,3})?", re.ASCII)
_DRAW = re.compile(r"[1-9]\d?", re.ASCII)
_LAST_DIGITS = re.compile(r"(\d+)(\D*)$", re.ASCII)

A_TIME = N_("a time of day as HH:MM")
HOURS = N_("hours as a text such as 7.5")


@dataclass(frozen=True, slots=True)
class LastUse:
    """What the resident says of the last use of water.

    ``at`` and ``to`` are times of day, or else ``hours_before`` counts from the arrival.
    """

    exact: str = "at"
    where: str = "this tap"
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
class VisitScript:
    """What happens at one visit, as far as it is not as expected."""

    visit: str
    arrives: str = ""
    waits: str = "here"
    last_use: LastUse = LastUse()
    answers: Mapping[str, str] = field(default_factory=dict)
    fill: Mapping[int, str] = field(default_factory=dict)

    def fill_of(self, draw: int) -> str:
        """Return how full the bottle of that draw got."""
        return self.fill.get(draw, "line")


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


def read_script(data: bytes, path_name: str, planned: RoundFile) -> Script:
    """Return the rehearsal that a route file carries, the default one where it has none.

    Raises:
        BadFile: With every fault of the block.
    """
    findings = Findings(path_name)
    whole = read_json(data, findings)
    block = whole.block("rehearsal") if whole and whole.has("rehearsal") else None
    script = _script(block, planned) if block else Script()
    findings.settle()
    return script


def _script(part: Part, planned: RoundFile) -> Script:
    part.only("begins", "laboratory_number", "visits", "reports", "results")
    visits = {visit.visit for visit in planned.visits}
    draws = {(visit.visit, draw["draw"]) for visit in planned.visits for draw in visit.draws}
    reports = {one.analyte: one for one in map(_report, _blocks(part, "reports"))}
    results: dict[tuple[str, int, str], str] = {}
    for one in _blocks(part, "results"):
        results.update(_result(one, draws, reports))
    read = [_visit(one, visits) for one in _blocks(part, "visits")]
    return Script(
        begins=_time(part, "begins") or BEGINS,
        laboratory_number=part.text("laboratory_number", optional=True) or FIRST_NUMBER,
        visits={one.visit: one for one in read},
        reports=reports,
        results=results,
        notes=tuple(part.findings.notes),
    )


def _blocks(part: Part, key: str) -> list[Part]:
    return list(part.blocks(key)) if part.has(key) else []


def _visit(part: Part, known: set[str]) -> VisitScript:
    part.only("id", "arrives", "waits", "last_use", "answers", "fill")
    visit = part.id("id")
    if visit and visit not in known:
        part.fault("not-listed", "id", visit, list="routes")
    use = part.block("last_use") if part.has("last_use") else None
    return VisitScript(
        visit=visit,
        arrives=_time(part, "arrives"),
        waits=part.word("waits", WAITS) if part.has("waits") else "here",
        last_use=_last_use(use) if use else LastUse(),
        answers=_texts(part, "answers"),
        fill=_fills(part),
    )


def _last_use(part: Part) -> LastUse:
    part.only("exact", "where", "at", "to", "hours_before")
    exact = part.word("exact", EXACT)
    hours = part.text("hours_before", optional=True, right=HOURS)
    if hours and not _HOURS.fullmatch(hours):
        part.fault("form", "hours_before", hours, right=HOURS)
        hours = ""
    at, to = _time(part, "at"), _time(part, "to")
    if exact in ("at", "about") and not (at or part.has("hours_before")):
        part.fault("missing", "at", called="at", right=A_TIME)
    for key in ("at", "to"):
        if exact == "between" and not part.has(key):
            part.fault("missing", key, called=key, right=A_TIME)
    where = part.text("where", optional=True) or "this tap"
    return LastUse(exact, where, at, to if exact == "between" else "", _hours(hours))


def _hours(text: str) -> Decimal | None:
    return Decimal(text) if text else None


def _fills(part: Part) -> dict[int, str]:
    fills: dict[int, str] = {}
    block = part.block("fill") if part.has("fill") else None
    if block is None:
        return fills
    for draw in block.value:
        if _DRAW.fullmatch(draw):
            fills[int(draw)] = block.word(draw, FILLS)
        else:
            block.fault("range", draw, draw, least=1, most=99)
    return fills


def _texts(part: Part, key: str) -> dict[str, str]:
    block = part.block(key) if part.has(key) else None
    return {name: block.text(name) for name in block.value} if block else {}


def _report(part: Part) -> Report:
    part.only("analyte", "unit", "detection", "reporting", "method", "analysed_at")
    texts = ("detection", "reporting", "method", "analysed_at")
    return Report(
        analyte=part.word("analyte", ANALYTES),
        unit=part.text("unit"),
        **{key: part.text(key, optional=True) for key in texts},
    )


def _result(
    part: Part, draws: set[tuple[str, int]], reports: Mapping[str, Report]
) -> dict[tuple[str, int, str], str]:
    part.only("visit", "draw", "analyte", "value")
    visit, draw = part.id("visit"), part.whole("draw", 1, 99)
    analyte, value = part.word("analyte", ANALYTES), part.text("value")
    if visit and draw and (visit, draw) not in draws:
        part.fault("not-listed", "draw", f"{visit}, {draw}", list="routes")
    if analyte and analyte not in reports:
        part.fault("not-listed", "analyte", analyte, list="reports")
    return {(visit, draw, analyte): value} if visit and draw and analyte and value else {}


def _time(part: Part, key: str) -> str:
    text = part.text(key, optional=True, right=A_TIME)
    if text and not _TIME.fullmatch(text):
        part.fault("form", key, text, right=A_TIME)
        return ""
    return text


def _latest(time: str, before: datetime, zone: str) -> datetime:
    """Return the latest moment at or before ``before`` at which clocks showed ``time``."""
    today = before.astimezone(zone_named(zone)).date()
    days = (today - timedelta(days=n) for n in range(3))
    return next(at for at in (at_local(day, time, zone) for day in days) if at <= before)
