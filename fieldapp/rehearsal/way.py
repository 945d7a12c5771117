"""What a person does at pages in a round: a route in the Kitchen, the receiving at the Bench.

It does not know where the pages are served: by nodes of their own, or inside this process.
"""

from collections import deque
from collections.abc import Mapping
from datetime import date, datetime, timedelta

from fieldapp.domain.facts import RoutePlanned
from fieldapp.reading.rounds import RoundFile
from fieldapp.rehearsal.browser import Browser
from fieldapp.rehearsal.day import Script
from fieldapp.rehearsal.kitchen import Visit
from fieldapp.rehearsal.nodes import Time

TO_THE_LABORATORY = timedelta(hours=2)
TO_THE_RESULTS = timedelta(days=3)

Codes = Mapping[tuple[str, int], str]
"""The bottle printed for each visit and draw."""


class Way:
    """A round with its script and its time, once its labels are printed.

    ``drawn`` grows by the visit and draw of each bottle that leaves a house with water in it.
    """

    def __init__(self, planned: RoundFile, script: Script, time: Time, codes: Codes) -> None:
        self.planned, self.script, self.time, self.codes = planned, script, time, codes
        self.drawn: set[tuple[str, int]] = set()

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
            back = visit.walk()
            self.drawn |= {(visit.visit, draw) for draw in visit.carried}
            if back is not None:
                left.append((back, visit))

    def visit(self, browser: Browser, visit: str) -> Visit:
        """Return a planned visit, to be walked by the sampler of its route."""
        (planned,) = [one for one in self.planned.visits if one.visit == visit]
        (route,) = [one for one in self.planned.routes if one.route == planned.route]
        codes = {draw: code for (of, draw), code in self.codes.items() if of == visit}
        names = {one.person: one.name for one in self.planned.people}
        signer = names.get(route.sampler) or route.sampler
        return Visit(browser, self.time, visit, self.script.visit(visit), codes, signer)

    def receive(self, browser: Browser) -> None:
        """Receive every bottle that came, with the laboratory's numbers."""
        self.time.until(self.time.now() + TO_THE_LABORATORY)
        choose(browser, self.person("clerk"))
        page = browser.open("/bench/")
        for code, number in self.came().values():
            form = page.main()
            assert form is not None
            page = browser.press(page, form, {"bottle": code, "laboratory_number": number})

    def came(self) -> dict[tuple[str, int], tuple[str, str]]:
        """Return code and laboratory number of each bottle that came, by visit and draw."""
        came = [place for place in self.codes if place in self.drawn]
        return {place: (self.codes[place], self.script.number(n)) for n, place in enumerate(came)}

    def results(self) -> str:
        """Return the laboratory's file, some days later; empty where it reports nothing."""
        self.time.until(self.time.now() + TO_THE_RESULTS)
        table = self.script.results_csv(self.came())
        return table if table.count("\n") > 1 else ""

    def person(self, role: str) -> str:
        """Return somebody of that role; the file's first person where nobody has it."""
        people = self.planned.people
        return next((p.person for p in people if role in p.roles), people[0].person)

    def _arrival(self, visit: str, day: date) -> datetime:
        return self.script.arrives_at(visit, day, self.time.zone) or self.time.now()


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
