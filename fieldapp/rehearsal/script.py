"""The ``rehearsal`` block of a route file: what the form walker does and the laboratory says.

The block, all of it optional (times are local to the round, ``HH:MM``)::

    "rehearsal": {
      "begins": "05:30",                  the clock at the start of the route's day
      "laboratory_number": "W27-0401",    the first number; the next ones count its digits up
      "visits": [{
        "id": "V-0401",
        "arrives": "05:40",               no earlier than this at the door
        "waits": "away",                  "away": leave and come back, "here": stay (the default),
                                          "not": draw before the stand is over
        "last_use": {"at": "22:30", "exact": "about", "where": "bath"},
                                          the latest 22:30 before the arrival; or
                    {"hours_before": "7.5", "exact": "at", "where": "this-tap"}
                    {"at": "22:00", "to": "23:00", "exact": "between", "where": "bath"}
                    {"exact": "unknown", "where": "this-tap"}
        "answers": {"filter": "bypassed"},
                                          only where not the first, expected answer
        "fill": {"1": "below"},           by draw, only where not "line"
        "photos": [{"draw": 1, "says": "…"}],
                                          pictures, before signing; without a draw: of the visit
        "swapped": "V-0402",              first bottles of both visits filled in each other's place
        "left_behind": [1]                full bottles that are never packed, by draw
      }],
      "coolers": [{                       without any, bottles come to the Bench in no cooler
        "route": "R-0504", "box": "3", "seals": "88 214, 88 215",
        "visits": ["V-0401"],             whose bottles go in; without: all that are left
        "to": "laboratory",               or "courier", "night-box", "colleague"
        "taken_by": "clerk-1",            a person of this file, named at the handover
        "bench_reads": "88 241"           where the Bench reads other numbers
      }],
      "reports": [{"analyte": "lead", "unit": "ug/L", "detection": "0.3", "reporting": "1",
                   "method": "EPA 200.8", "analysed_at": "2027-05-07"}],
      "results": [{"visit": "V-0401", "draw": 1, "analyte": "lead", "value": "<1"}]
    }

A visit that the block does not name was last used eight hours before the arrival, and all else
is as expected. A draw without a result stays without one.
"""

import re
from collections.abc import Mapping
from dataclasses import replace
from decimal import Decimal

from fieldapp.commands.custody import TO
from fieldapp.commands.last_use import EXACT, WHERE
from fieldapp.domain.protocols import read_protocol
from fieldapp.domain.protocols.parts import RESERVED
from fieldapp.domain.protocols.stations import DIFFERENT
from fieldapp.domain.protocols.steps import LAST_USE, Ask, Look
from fieldapp.reading.faults import Findings
from fieldapp.reading.part import Part, read_json
from fieldapp.reading.rounds import RoundFile
from fieldapp.rehearsal.day import BEGINS, FIRST_NUMBER
from fieldapp.rehearsal.day import LastUse as LastUse
from fieldapp.rehearsal.day import Load as Load
from fieldapp.rehearsal.day import Photo as Photo
from fieldapp.rehearsal.day import Report as Report
from fieldapp.rehearsal.day import Script as Script
from fieldapp.rehearsal.day import VisitScript as VisitScript
from fieldapp.words import N_

WAITS = ("here", "away", "not")
FILLS = ("line", "below", "over", "spilled")
ANALYTES = ("lead", "copper")

_TIME = re.compile(r"([01]\d|2[0-3]):[0-5]\d", re.ASCII)
_HOURS = re.compile(r"\d{1,3}(\.\d{1,3})?", re.ASCII)
_DRAW = re.compile(r"[1-9]\d?", re.ASCII)

A_TIME = N_("a time of day as HH:MM")
HOURS = N_("hours as a text such as 7.5")


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
    part.only("begins", "laboratory_number", "visits", "coolers", "reports", "results")
    asked = _asked(planned)
    visits = {visit.visit: asked.get(visit.protocol, {}) for visit in planned.visits}
    draws = {(visit.visit, draw["draw"]) for visit in planned.visits for draw in visit.draws}
    reports = {one.analyte: one for one in map(_report, _blocks(part, "reports"))}
    results: dict[tuple[str, int, str], str] = {}
    for one in _blocks(part, "results"):
        results.update(_result(one, draws, reports))
    read = _both_ways([_visit(one, visits, draws) for one in _blocks(part, "visits")])
    return Script(
        begins=_time(part, "begins") or BEGINS,
        laboratory_number=part.text("laboratory_number", optional=True) or FIRST_NUMBER,
        visits={one.visit: one for one in read},
        loads=tuple(_load(one, planned) for one in _blocks(part, "coolers")),
        reports=reports,
        results=results,
        notes=tuple(part.findings.notes),
    )


def _blocks(part: Part, key: str) -> list[Part]:
    return list(part.blocks(key)) if part.has(key) else []


def _asked(planned: RoundFile) -> dict[str, dict[str, tuple[str, ...]]]:
    """Return by protocol what it asks, each question with its answers."""
    asked: dict[str, dict[str, tuple[str, ...]]] = {}
    for kept in planned.protocols:
        questions = asked.setdefault(kept.protocol, {})
        for step in read_protocol(kept.toml).steps:
            if isinstance(step, Ask) and step.question != LAST_USE:
                questions[step.question] = step.answers
            elif isinstance(step, Look):
                questions[step.at] = (step.expect, DIFFERENT)
    return asked


def _visit(
    part: Part, known: Mapping[str, Mapping[str, tuple[str, ...]]], draws: set[tuple[str, int]]
) -> VisitScript:
    part.only(
        "id", "arrives", "waits", "last_use", "answers", "fill", "photos", "swapped", "left_behind"
    )
    visit = part.id("id")
    if visit and visit not in known:
        part.fault("not-listed", "id", visit, list="routes")
    use = part.block("last_use") if part.has("last_use") else None
    return VisitScript(
        visit=visit,
        arrives=_time(part, "arrives"),
        waits=part.word("waits", WAITS) if part.has("waits") else "here",
        last_use=_last_use(use) if use else LastUse(),
        answers=_answers(part, known.get(visit, {})),
        fill=_fills(part),
        photos=tuple(_photo(one, visit, draws) for one in _blocks(part, "photos")),
        swapped=part.word("swapped", [v for v in known if v != visit])
        if part.has("swapped")
        else "",
        left_behind=_left_behind(part, visit, draws),
    )


def _both_ways(read: list[VisitScript]) -> list[VisitScript]:
    """Return the visits with each swap told at both of them."""
    other = {one.swapped: one.visit for one in read if one.swapped}
    told = {one.visit: one for one in read}
    for visit, swapped in other.items():
        told[visit] = replace(told.get(visit, VisitScript(visit)), swapped=swapped)
    return list(told.values())


def _photo(part: Part, visit: str, draws: set[tuple[str, int]]) -> Photo:
    part.only("draw", "says")
    draw = part.whole("draw", 1, 99) if part.has("draw") else 0
    if draw and (visit, draw) not in draws:
        part.fault("not-listed", "draw", f"{visit}, {draw}", list="routes")
    return Photo(draw, part.text("says", optional=True))


def _left_behind(part: Part, visit: str, draws: set[tuple[str, int]]) -> frozenset[int]:
    left = part.wholes("left_behind", 1, 99) if part.has("left_behind") else ()
    for draw in left:
        if (visit, draw) not in draws:
            part.fault("not-listed", "left_behind", f"{visit}, {draw}", list="routes")
    return frozenset(left)


def _load(part: Part, planned: RoundFile) -> Load:
    part.only("route", "box", "seals", "visits", "to", "taken_by", "bench_reads")
    route = part.word("route", [one.route for one in planned.routes])
    here = [one.visit for one in planned.visits if one.route == route]
    people = [one.person for one in planned.people]
    return Load(
        route=route,
        box=part.text("box"),
        seals=_seals(part, "seals"),
        visits=part.words("visits", here) if part.has("visits") else (),
        to=part.word("to", TO) if part.has("to") else TO[0],
        taken_by=part.word("taken_by", people) if part.has("taken_by") else "",
        bench_reads=_seals(part, "bench_reads") if part.has("bench_reads") else (),
    )


def _seals(part: Part, key: str) -> tuple[str, ...]:
    """Return the numbers of a text that parts them by commas."""
    return tuple(number.strip() for number in part.text(key).split(",") if number.strip())


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
    where = part.word("where", WHERE) if part.has("where") else "this-tap"
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


def _answers(part: Part, asked: Mapping[str, tuple[str, ...]]) -> dict[str, str]:
    answers: dict[str, str] = {}
    block = part.block("answers") if part.has("answers") else None
    if block is None:
        return answers
    for question in block.value:
        if question in asked:
            answers[question] = block.word(question, asked[question])
        elif question in RESERVED:
            answers[question] = block.text(question)
        else:
            block.fault("word", "", question, right=tuple(asked))
    return answers


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
