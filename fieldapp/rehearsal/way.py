"""What a person does at pages in a round: a route in the Kitchen, the receiving at the Bench.

It does not know where the pages are served: by nodes of their own, or inside this process.
"""

from collections import deque
from collections.abc import Mapping
from datetime import date, datetime, timedelta

from fieldapp.domain.facts import RoutePlanned
from fieldapp.reading.rounds import RoundFile
from fieldapp.rehearsal.browser import Browser, Page
from fieldapp.rehearsal.crate import Cooler, Crate
from fieldapp.rehearsal.day import Script, VisitScript
from fieldapp.rehearsal.kitchen import Visit
from fieldapp.rehearsal.nodes import Time

TO_THE_LABORATORY = timedelta(hours=2)
TO_THE_RESULTS = timedelta(days=3)

Codes = Mapping[tuple[str, int], str]
"""The bottle printed for each visit and draw."""


class Way:
    """A round with its script and its time, once its labels are printed.

    ``drawn`` grows by the visit and draw of each bottle that leaves a house with water in it,
    with the code it came to bear; ``coolers`` by each load that was handed over.
    """

    def __init__(self, planned: RoundFile, script: Script, time: Time, codes: Codes) -> None:
        self.planned, self.script, self.time, self.codes = planned, script, time, codes
        self.drawn: dict[tuple[str, int], str] = {}
        self.coolers: list[Cooler] = []

    def walk(self, browser: Browser, route: RoutePlanned) -> None:
        """Walk the visits in the script's order; a left one is come back to when it is ready."""
        day = _day(route)
        self.time.until(self.script.begins_at(day, self.time.zone))
        mine = [v for v in self.planned.visits if v.route == route.route]
        mine.sort(key=lambda v: (self.script.visit(v.visit).arrives or "99", v.position))
        ahead = deque(mine)
        left: list[tuple[datetime, Visit]] = []
        while ahead or left:
            arrival = self._arrival(ahead[0].visit, day) if ahead else None
            due = min(left, key=lambda one: one[0]) if left else None
            if due is not None and (arrival is None or due[0] <= arrival):
                left.remove(due)
                self.time.until(due[0])
                visit = due[1]
            else:
                planned = ahead.popleft()
                if arrival is not None:
                    self.time.until(arrival)
                visit = self.visit(browser, planned.visit)
            back = self.take(visit)
            if back is not None:
                left.append((back, visit))
        self._pack(browser, route.route)

    def take(self, visit: Visit) -> datetime | None:
        """Walk a visit and carry its bottles away; of one left to wait, return when it is over."""
        back = visit.walk()
        self.drawn |= {(visit.visit, draw): visit.codes[draw] for draw in visit.carried}
        return back

    def visit(self, browser: Browser, visit: str) -> Visit:
        """Return a planned visit, to be walked by the sampler of its route."""
        (planned,) = [one for one in self.planned.visits if one.visit == visit]
        (route,) = [one for one in self.planned.routes if one.route == planned.route]
        script = self.script.visit(visit)
        codes = {draw: code for (of, draw), code in self.codes.items() if of == visit}
        taken = {**codes, **self._swapped(script)}
        names = {one.person: one.name for one in self.planned.people}
        signer = names.get(route.sampler) or route.sampler
        strange = set(taken.values()) - set(codes.values())
        return Visit(browser, self.time, visit, script, taken, signer, strange)

    def receive(self, browser: Browser) -> None:
        """Receive every bottle that came, with the laboratory's numbers."""
        self.time.until(self.time.now() + TO_THE_LABORATORY)
        choose(browser, self.person("clerk"))
        numbers = {code: number for code, number in self.came().values()}
        for cooler in self.coolers:
            page = self._open(browser, cooler)
            for code in cooler.codes:
                page = _receive(browser, page, code, numbers.pop(code))
        page = browser.open("/bench/")
        for code, number in numbers.items():
            page = _receive(browser, page, code, number)

    def came(self) -> dict[tuple[str, int], tuple[str, str]]:
        """Return code and laboratory number of each bottle that came, by visit and draw."""
        came = [place for place in self.codes if place in self.drawn]
        came = [(visit, draw) for visit, draw in came if not self._behind(visit, draw)]
        return {place: (self.drawn[place], self.script.number(n)) for n, place in enumerate(came)}

    def results(self) -> str:
        """Return the laboratory's file, some days later; empty where it reports nothing."""
        self.time.until(self.time.now() + TO_THE_RESULTS)
        table = self.script.results_csv(self.came())
        return table if table.count("\n") > 1 else ""

    def person(self, role: str) -> str:
        """Return somebody of that role; the file's first person where nobody has it."""
        people = self.planned.people
        return next((p.person for p in people if role in p.roles), people[0].person)

    def _swapped(self, script: VisitScript) -> dict[int, str]:
        """Return the other visit's first bottle where the two changed places."""
        return {1: self.codes[script.swapped, 1]} if script.swapped else {}

    def _behind(self, visit: str, draw: int) -> bool:
        return draw in self.script.visit(visit).left_behind

    def _pack(self, browser: Browser, route: str) -> None:
        """Put the route's bottles into its coolers, where the script has any."""
        loads = [load for load in self.script.loads if load.route == route]
        if not loads:
            return
        visits = [one.visit for one in self.planned.visits if one.route == route]
        mine = [(place, code) for place, code in self.drawn.items() if place[0] in visits]
        bottles = {visit: [code for (of, _), code in mine if of == visit] for visit in visits}
        crate = Crate(browser, route, bottles)
        crate.leave_behind([code for place, code in mine if self._behind(*place)])
        names = {one.person: one.name for one in self.planned.people}
        self.coolers += crate.close(loads, names)

    def _open(self, browser: Browser, cooler: Cooler) -> Page:
        """Open a cooler as it is seen; where its seals do not lead to it, choose it."""
        page = browser.open("/bench/open")
        form = page.main()
        assert form is not None
        seals = cooler.load.bench_reads or cooler.load.seals
        seen = {"seals": ", ".join(seals), "whole": "whole", "count": str(len(cooler.codes))}
        page = browser.press(page, form, seen)
        form = page.main()
        if form is not None and form.values("cooler"):
            page = browser.press(page, form, {"cooler": cooler.cooler})
        return page

    def _arrival(self, visit: str, day: date) -> datetime:
        return self.script.arrives_at(visit, day, self.time.zone) or self.time.now()


def _receive(browser: Browser, page: Page, code: str, number: str) -> Page:
    form = page.main()
    assert form is not None
    return browser.press(page, form, {"bottle": code, "laboratory_number": number})


def choose(browser: Browser, person: str) -> None:
    """Say on the first page who holds the device."""
    page = browser.open("/")
    browser.press(page, page.form("/person"), {"person": person})


def begins_at(planned: RoundFile, script: Script) -> datetime | None:
    """Return when the first day of a round begins; nothing where it has no route."""
    days = sorted(_day(route) for route in planned.routes)
    return script.begins_at(days[0], planned.round.zone) if days else None


def _day(route: RoutePlanned) -> date:
    return date.fromisoformat(route.day)
