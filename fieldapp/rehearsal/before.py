"""The demo's round of the year before: walked whole at the real pages, decided, reported, settled.

Its clock stood in that year, so every entry is signed, chained and dated as it would be then.
"""

import base64
from collections.abc import Callable, Mapping, Sequence
from datetime import timedelta
from pathlib import Path

from fieldapp import work
from fieldapp.commands import desk
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading
from fieldapp.identity import new_act
from fieldapp.projections.pages import Pages
from fieldapp.rehearsal.browser import Browser, Trouble
from fieldapp.rehearsal.inside import InsideBrowser, InsideTablet
from fieldapp.rehearsal.way import Way, choose
from fieldapp.store import Store

DECISIONS: Mapping[str, tuple[bool, str]] = {
    "V-0605": (True, "Off for months, the household says: this is the water they drink."),
    "V-0608": (True, "The work was on another riser."),
    "V-0609": (False, "Water ran over the rim, so part of the first litre is lost."),
}
"""What the coordinator said of each held bottle before any result was there, by visit (R8)."""

NEVER_DRAWN = ("V-0610",)
"""Visits that ended at the door; their labels were voided."""

SECOND_NUMBER = ("V-0602", 1, "F26-0691")
"""A bottle that the clerk received twice, the second time under another number."""

CORRECTED = ("V-0611", 1, "copper", "0.69")
"""A value that the laboratory sent once more, otherwise."""
TO_THE_CORRECTION = timedelta(days=6)

SETTLED: Mapping[str, str] = {
    "received-twice": "Two stickers were on it. The laboratory keeps the first number.",
    "results-differ": "The laboratory corrected a dilution and sent the value anew.",
}

Decide = Callable[[Pages, Reading], Sequence[Fact]]


def walk_before(central: Store, folder: Path, way: Way) -> None:
    """Do the whole way of a planned round, from its labels to its last settled finding.

    Args:
        central: The open central, where the round is planned and its labels are printed.
        folder: Where the tablet of that year lies; it can go when this is done.
        way: The round and its time, before the day.

    Raises:
        Trouble: A page or an exchange failed, or a finding came that nobody settles.
    """
    route = way.planned.routes[0]
    with InsideTablet(folder, way.time, central, route.sampler) as tablet:
        tablet.exchange()
        browser = InsideBrowser(tablet.store)
        choose(browser, route.sampler)
        way.walk(browser, route)
        tablet.exchange()
    counter = InsideBrowser(central)
    way.receive(counter)
    _receive_again(counter, way)
    _decide(central, way)
    _import(central, "results.csv", way.results())
    way.time.until(way.time.now() + TO_THE_CORRECTION)
    _import(central, "corrected.csv", _corrected(way))
    _settle(central, way)


def _receive_again(counter: Browser, way: Way) -> None:
    visit, draw, number = SECOND_NUMBER
    page = counter.open("/bench/")
    form = page.main()
    assert form is not None
    given = {"bottle": way.codes[visit, draw], "laboratory_number": number}
    counter.press(page, form, {**given, "numbering": "sticker"})


def _decide(central: Store, way: Way) -> None:
    for visit, (analyse, reason) in DECISIONS.items():
        for (of, _draw), code in way.codes.items():
            if of == visit:
                _press(central, way, _decision(code, analyse, reason))
    for visit in NEVER_DRAWN:
        _press(central, way, _voiding(way.codes[visit, 1]))


def _decision(code: str, analyse: bool, reason: str) -> Decide:
    return lambda pages, reading: desk.decide_analysis(
        pages, reading, bottle=code, analyse=analyse, reason=reason
    )


def _voiding(code: str) -> Decide:
    return lambda pages, reading: desk.void_bottle(pages, reading, bottle=code, why="other")


def _corrected(way: Way) -> str:
    """Return a file of one row, with the value that the laboratory sent later."""
    visit, draw, analyte, value = CORRECTED
    rows = way.script.results_csv({(visit, draw): way.came()[visit, draw]}).splitlines()
    (row,) = [row for row in rows if f",{analyte}," in row]
    former = way.script.results[visit, draw, analyte]
    return "\n".join([rows[0], row.replace(f",{former},", f",{value},"), ""])


def _import(central: Store, name: str, table: str) -> None:
    raw = base64.b64encode(table.encode()).decode()
    work.do(central, "results-import", {"file": name, "data": raw}, work.quiet)


def _settle(central: Store, way: Way) -> None:
    with central.pages() as pages:
        found = pages.findings(central.clock.read().at)
    for one in found:
        if one["kind"] not in SETTLED:
            raise Trouble(f"The year before ends with a finding nobody settles: {one['kind']}")
        _press(central, way, _settlement(str(one["finding"]), SETTLED[one["kind"]]))


def _settlement(finding: str, reason: str) -> Decide:
    return lambda pages, reading: desk.settle_finding(
        pages, reading, finding=finding, reason=reason
    )


def _press(central: Store, way: Way, decide: Decide) -> None:
    central.act(new_act(), {}, decide, by=way.person("coordinator"))
