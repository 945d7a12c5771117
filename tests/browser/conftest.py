"""Chromium against a rehearsal's nodes: the shipped day at 05:20, plan fetched, nothing drawn."""

import shutil
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

from fieldapp import work
from fieldapp.domain.codes import new_code
from fieldapp.domain.facts import BottlePacked, BottleReceived, CoolerSealed, Fact
from fieldapp.identity import new_act
from fieldapp.places import shipped
from fieldapp.reading.rounds import RoundFile, read_round
from fieldapp.rehearsal import rehearse
from fieldapp.rehearsal.nodes import Process, Time, make_node
from fieldapp.rehearsal.script import read_script
from fieldapp.rehearsal.walk import CLEAN_DAY, Codes, invite_and_enrol, plan_at
from fieldapp.running import hand_over
from fieldapp.store import Store

FLAGS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
]  # fmt: skip
PHONE = {"width": 360, "height": 740}
DESKTOP = {"width": 1280, "height": 800}
COOLER = "C-000003"


@dataclass
class Day:
    """A central and a tablet of their own processes, and what the tests need to know of them."""

    central: str
    tablet: str
    folder: Path
    time: Time
    codes: Codes
    planned: RoundFile
    found: dict[str, str] = field(default_factory=dict)

    def code(self, visit: str, draw: int) -> str:
        """Return the bottle printed for that draw."""
        return self.codes[visit, draw]


def chromium() -> str:
    """Return the system's own Chromium; ``make test`` brings it."""
    found = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))))
    assert found, "Chromium is missing: run make test, which brings it"
    return found


@pytest.fixture(scope="session")
def browser() -> Iterator[Browser]:
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=chromium(), args=FLAGS)
        yield started
        started.close()


@pytest.fixture
def phone(browser: Browser) -> Iterator[Page]:
    context = browser.new_context(viewport=PHONE, has_touch=True)
    yield from _page(context)


@pytest.fixture
def desktop(browser: Browser) -> Iterator[Page]:
    yield from _page(browser.new_context(viewport=DESKTOP))


def _page(context: BrowserContext) -> Iterator[Page]:
    context.set_default_timeout(10_000)
    page = context.new_page()
    faults: list[str] = []
    page.on("pageerror", lambda fault: faults.append(str(fault)))
    page.on(
        "console",
        lambda said: faults.append(said.text) if "Content Security Policy" in said.text else None,
    )
    yield page
    context.close()
    assert faults == [], f"the page's own scripts failed: {faults}"


@pytest.fixture(scope="module")
def day(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Day]:
    """Start the shipped day: planned at central, labels issued, fetched by an enrolled tablet."""
    folder = tmp_path_factory.mktemp("day")
    file = shipped("demo_routes") / CLEAN_DAY
    planned = read_round(file.read_bytes(), file.name)
    script = read_script(file.read_bytes(), file.name, planned)
    time = Time(planned.round.zone)
    first = datetime.fromisoformat(planned.routes[0].day).date()
    time.begin(script.begins_at(first, time.zone) - timedelta(minutes=10))
    with make_node(folder / "central", time) as store:
        codes = plan_at(store, file.name, file.read_bytes(), planned)
    with Process("central", folder / "central") as central:
        make_node(folder / "tablet", time).close()
        invite_and_enrol(folder / "central", folder / "tablet", central.url, "sampler-1")
        with Process("serve", folder / "tablet") as tablet:
            hand_over(folder / "tablet", "sync", {}, work.quiet)
            yield Day(central.url, tablet.url, folder, time, codes, planned)


@pytest.fixture(scope="session")
def worked(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Day]:
    """Give the whole rehearsed day, served again, with one receipt that nobody planned."""
    folder = tmp_path_factory.mktemp("worked")
    rehearse(None, keep=folder, say=lambda _line: None)
    file = shipped("demo_routes") / CLEAN_DAY
    planned = read_round(file.read_bytes(), file.name)
    stranger = new_code()
    with Store.open(folder / "central") as store:
        unknown = BottleReceived(bottle=stranger, outcome="held", reason="no record")
        store.act(new_act(), {}, lambda _pages, _reading: [unknown], by="clerk-1")
        with store.pages() as pages:
            finding = pages.findings(store.clock.read().at)[0]["finding"]
            rows = pages.bottles(round_id=planned.round.round)
    codes = {(str(row["visit"]), int(row["draw"])): str(row["bottle"]) for row in rows}
    found = {"finding": finding, "bottle": codes["V-0401", 1], "cooler": COOLER}
    with Store.open(folder / "tablet") as store, store.pages() as pages:
        signed = [e for e in pages.recorded("V-0401") if e.fact.kind == "visit.signed"]
        found["entry"] = signed[0].hash
    for name in ("central", "tablet"):
        with Store.open(folder / name) as store:
            facts = _cooler_of(found["bottle"], planned.routes[0].route)
            store.act(new_act(), {}, lambda _pages, _reading, made=facts: made, by="sampler-1")
    time = Time(planned.round.zone, [folder / "central", folder / "tablet"])
    with (
        Process("central", folder / "central") as central,
        Process("serve", folder / "tablet") as tablet,
    ):
        yield Day(central.url, tablet.url, folder, time, codes, planned, found)


def _cooler_of(bottle: str, route: str) -> list[Fact]:
    """Return the facts of one bottle packed and sealed into a cooler."""
    where = {"cooler": COOLER, "route": route, "box": "3"}
    return [
        BottlePacked(bottle=bottle, **where),
        CoolerSealed(seals=("88 214",), count=1, **where),
    ]


def choose(page: Page, root: str, person: str) -> None:
    """Say who holds the device."""
    page.goto(root + "/")
    with page.expect_navigation():
        page.locator(f"button[name=person][value={person}]").click()
