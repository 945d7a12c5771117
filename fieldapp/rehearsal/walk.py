"""The whole way of a round: plan at central, the day on tablets, receipt, results, answer.

Every press goes through a page of a node in its own process, over HTTP, as a person's would.
"""

import base64
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

from fieldapp import identity, work
from fieldapp.domain.errors import RuleBroken
from fieldapp.nodes import become_central
from fieldapp.places import shipped
from fieldapp.reading.rounds import RoundFile, read_round
from fieldapp.rehearsal.account import Account, account_of
from fieldapp.rehearsal.browser import Browser, Trouble
from fieldapp.rehearsal.day import Script
from fieldapp.rehearsal.folders import folder_for, make_room
from fieldapp.rehearsal.nodes import NotStarted, Process, Time, make_node
from fieldapp.rehearsal.script import read_script
from fieldapp.rehearsal.way import Codes as Codes
from fieldapp.rehearsal.way import Way, begins_at, choose
from fieldapp.running import hand_over
from fieldapp.store import Store
from fieldapp.work.faults import said_of
from sync.errors import SyncError

CLEAN_DAY = "clean-day.json"
BEFORE_THE_DAY = timedelta(minutes=20)


def rehearse(
    route: Path | None, *, keep: Path | None = None, say: Callable[[str], None] = print
) -> Account:
    """Walk a round file (the shipped clean day where none is named).

    Args:
        route: The round file; its ``rehearsal`` block says what happens.
        keep: A folder that keeps ``central`` and ``tablet`` afterwards, closed; those of an
            earlier rehearsal make room.
        say: Told what is being done, a line each.

    Raises:
        BadFile: With every fault of the file; nothing was walked.
        Unsuitable: ``keep`` holds a folder of that name that no rehearsal made.
    """
    file = route or shipped("demo_routes") / CLEAN_DAY
    data = file.read_bytes()
    planned = read_round(data, file.name)
    script = read_script(data, file.name, planned)
    with folder_for(keep, "rehearsal-") as folder:
        make_room(folder)
        return _Walk(planned, script, file.name, data, folder, say).run()


class _Walk:
    def __init__(
        self,
        planned: RoundFile,
        script: Script,
        name: str,
        data: bytes,
        folder: Path,
        say: Callable[[str], None],
    ) -> None:
        self.planned, self.script, self.name, self.data = planned, script, name, data
        self.folder, self.say = folder, say
        self.time = Time(planned.round.zone)
        self.days = sorted(planned.routes, key=lambda one: (one.day, one.route))
        self.lines: list[str] = []
        self.stopped = False

    @property
    def central(self) -> Path:
        return self.folder / "central"

    def run(self) -> Account:
        """Do the whole way and return what it came to."""
        tablets = self._tablets()
        first = begins_at(self.planned, self.script)
        if first is not None:
            self.time.begin(first - BEFORE_THE_DAY)
        self.way = self._plan()
        try:
            with Process("central", self.central) as central:
                for sampler, folder in tablets.items():
                    self._day_of(sampler, folder, central.url)
                self._receive(central.url)
                self._results()
        except (Trouble, NotStarted, RuleBroken, SyncError) as fault:
            # what was recorded up to here is counted all the same
            self._tell(f"Stopped: {' '.join(said_of(fault)['lines'])}")
            self.stopped = True
        walked = [folder for folder in tablets.values() if identity.exists(folder)]
        return account_of(
            self.central, walked, self.planned.round.round, self.lines, stopped=self.stopped
        )

    def _tablets(self) -> dict[str, Path]:
        """Return a folder for each sampler, ``tablet`` for the first."""
        samplers = list(dict.fromkeys(route.sampler for route in self.days))
        return {
            sampler: self.folder / ("tablet" if n == 0 else f"tablet-{n + 1}")
            for n, sampler in enumerate(samplers)
        }

    def _plan(self) -> Way:
        """Import the round at central and print its labels."""
        with make_node(self.central, self.time) as store:
            codes = plan_at(store, self.name, self.data, self.planned)
        self._tell(f"Desk: round {self.planned.round.round}, {len(codes)} labels printed.")
        return Way(self.planned, self.script, self.time, codes)

    def _day_of(self, sampler: str, folder: Path, central: str) -> None:
        """Enrol a tablet, fetch, walk its routes, send."""
        make_node(folder, self.time).close()
        invite_and_enrol(self.central, folder, central, sampler)
        with Process("serve", folder) as tablet:
            browser = Browser(tablet.url)
            fetched = hand_over(folder, "sync", {}, work.quiet)
            self._tell(f"Kitchen {folder.name}: enrolled, fetched {fetched['pulled']} entries.")
            choose(browser, sampler)
            for route in self.days:
                if route.sampler == sampler:
                    self.way.walk(browser, route)
            sent = hand_over(folder, "sync", {}, work.quiet)
            self._tell(
                f"Kitchen {folder.name}: {browser.presses} presses, sent {sent['pushed']} entries, "
                f"waiting {sent['waiting']}."
            )

    def _receive(self, central: str) -> None:
        """Receive every filled bottle at the Bench."""
        self.way.receive(Browser(central))
        self._tell(f"Bench: {self._seen()}{len(self.way.came())} bottles scanned.")

    def _seen(self) -> str:
        coolers = len(self.way.coolers)
        return f"{coolers} cooler{'s' if coolers > 1 else ''} opened, " if coolers else ""

    def _results(self) -> None:
        """Import the laboratory's file at central, over its own door for commands."""
        table = self.way.results()
        if not table:
            return
        raw = base64.b64encode(table.encode()).decode()
        answer = hand_over(
            self.central, "results-import", {"file": "results.csv", "data": raw}, work.quiet
        )
        self._tell(f"Desk: {answer['rows']} results in.")

    def _tell(self, line: str) -> None:
        self.lines.append(line)
        self.say(line)


def plan_at(store: Store, name: str, data: bytes, planned: RoundFile) -> dict[tuple[str, int], str]:
    """Make the node a central, import the round there, print its labels; return the codes."""
    become_central(store)
    raw = base64.b64encode(data).decode()
    work.do(store, "round-import", {"file": name, "data": raw}, work.quiet)
    for route in planned.routes:
        if any(visit.route == route.route for visit in planned.visits):
            work.do(store, "labels", {"route": route.route}, work.quiet)
    with store.pages() as pages:
        rows = pages.bottles(round_id=planned.round.round)
    return {(str(row["visit"]), int(row["draw"])): str(row["bottle"]) for row in rows}


def invite_and_enrol(central: Path, tablet: Path, url: str, person: str) -> None:
    """Enrol a tablet for a person with a code that the running central gives."""
    invited = hand_over(central, "invite", {"person": person}, work.quiet)
    hand_over(tablet, "enrol", {"url": url, "code": invited["code"]}, work.quiet)
