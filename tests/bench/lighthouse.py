"""The scores that Lighthouse gives the route board and a step on a phone, where Node is there.

Its package comes from npm into a throwaway folder. Whatever is missing or fails is said in one
line; it never ends the run.
"""

import json
import os
import shutil
import signal
import subprocess
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

from fieldapp import work
from fieldapp.places import shipped
from fieldapp.reading.rounds import read_round
from fieldapp.rehearsal.nodes import Process, Time, make_node
from fieldapp.rehearsal.script import read_script
from fieldapp.rehearsal.walk import CLEAN_DAY, invite_and_enrol, plan_at
from fieldapp.running import hand_over
from tests import nodes
from tests.store.served import Browser

PACKAGE = "lighthouse@12.2.3"
CATEGORIES = ("performance", "accessibility", "best-practices", "seo")
CHROMIUM = ("chromium", "chromium-browser", "google-chrome")
FLAGS = (
    "--headless=new --no-sandbox --disable-gpu --disable-background-networking"
    " --disable-component-update --disable-sync"
)
VISIT = "V-0401"
PAGES = {
    "route board": f"/kitchen/routes/{nodes.ROUTE}",
    "Kitchen step": f"/kitchen/visits/{VISIT}",
}
# Lighthouse's own bound of what it shows in green.
GOOD = 0.9
INSTALL_S, LOOK_S, END_S = 180, 120, 10


class LeftOut(Exception):
    """Lighthouse gave no scores; the message says why."""


@dataclass(frozen=True)
class Scores:
    """What one page was given, from 0 to 100, in the order of ``CATEGORIES``, and what it lacks."""

    page: str
    given: tuple[int | None, ...]
    short: tuple[str, ...]


def lighthouse(folder: Path) -> Iterator[str]:
    """Yield the lines to print: a row a page, or the one line that says why there is none."""
    try:
        looked = Lighthouse.install(folder / "node")
        with tablet(folder) as (root, cookie):
            rows = [looked.look(name, root + path, cookie) for name, path in PAGES.items()]
    except LeftOut as why:
        yield f"Lighthouse was left out: {why}"
        return
    except Exception as why:  # what was measured before it is not lost to a tool from outside
        yield f"Lighthouse was left out: {type(why).__name__}: {why}"
        return
    yield f"{f'Lighthouse {looked.version}, phone, of 100':<50}" + "".join(
        f"{name:>15}" for name in CATEGORIES
    )
    for row in rows:
        yield f"{row.page:<50}" + "".join(
            f"{'none' if score is None else score:>15}" for score in row.given
        )
        if row.short:
            yield f"  not passed: {', '.join(row.short)}"


@dataclass(frozen=True)
class Lighthouse:
    """The package in its folder, with the Chromium it looks through."""

    folder: Path
    chromium: str
    version: str

    @classmethod
    def install(cls, folder: Path) -> "Lighthouse":
        """Bring the package by npm.

        Raises:
            LeftOut: Node, npm or Chromium is not there, or npm could not bring the package.
        """
        found = next(filter(None, map(shutil.which, CHROMIUM)), "")
        for name, there in (("node", shutil.which("node")), ("npm", shutil.which("npm"))):
            if not there:
                raise LeftOut(f"{name} is not on the PATH.")
        if not found:
            raise LeftOut("Chromium is not on the PATH.")
        folder.mkdir(parents=True)
        words = ["install", "--no-audit", "--no-fund", "--ignore-scripts", "--fetch-retries=1"]
        _run(["npm", *words, "--prefix", str(folder), PACKAGE], folder, INSTALL_S)
        package = folder / "node_modules" / "lighthouse"
        version = json.loads((package / "package.json").read_text("utf-8"))["version"]
        return cls(folder, found, version)

    def look(self, name: str, url: str, cookie: str) -> Scores:
        """Have one page judged as the person of that cookie sees it.

        Raises:
            LeftOut: Lighthouse did not come to an end, or judged another page than was asked.
        """
        headers, report = self.folder / "headers.json", self.folder / "report.json"
        headers.write_text(json.dumps({"Cookie": cookie}), "utf-8")
        program = self.folder / "node_modules" / "lighthouse" / "cli" / "index.js"
        command = [
            "node", str(program), url, "--quiet", "--no-enable-error-reporting",
            "--output=json", f"--output-path={report}", f"--extra-headers={headers}",
            f"--chrome-flags={FLAGS}", f"--only-categories={','.join(CATEGORIES)}",
        ]  # fmt: skip
        _run(command, self.folder, LOOK_S, CHROME_PATH=self.chromium)
        read = json.loads(report.read_text("utf-8"))
        report.unlink()
        # Without a chosen person the node leads elsewhere, and those scores would be another's.
        if read["finalDisplayedUrl"] != url:
            raise LeftOut(f"asked for {url}, it was shown {read['finalDisplayedUrl']}.")
        given = (read["categories"][category]["score"] for category in CATEGORIES)
        scores = tuple(None if one is None else round(one * 100) for one in given)
        return Scores(name, scores, tuple(_short(read)))


def _short(report: dict[str, Any]) -> Iterator[str]:
    """Yield the audits that cost a page of its score: those below nine tenths."""
    for category in CATEGORIES:
        for part in report["categories"][category]["auditRefs"]:
            score = report["audits"][part["id"]]["score"]
            if part["weight"] and score is not None and score < GOOD:
                yield part["id"]


def _run(command: list[str], folder: Path, seconds: float, **env: str) -> None:
    """Run a command to its end, or stop it so that it takes its own browser along."""
    process = subprocess.Popen(
        command, cwd=folder, env={**os.environ, **env}, stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    try:
        _, said = process.communicate(timeout=seconds)
    except subprocess.TimeoutExpired:
        process.send_signal(signal.SIGINT)
        try:
            process.communicate(timeout=END_S)
        except subprocess.TimeoutExpired:
            process.kill()
            process.communicate()
        raise LeftOut(f"{command[0]} had not ended after {seconds:.0f} s.") from None
    if process.returncode:
        first = (said.strip().splitlines() or ["it said nothing"])[0]
        raise LeftOut(f"{command[0]} ended with {process.returncode}: {first[:160]}")


@contextmanager
def tablet(folder: Path) -> Iterator[tuple[str, str]]:
    """Serve the shipped day's tablet at 05:30 with a visit begun; give its root and a cookie."""
    file = shipped("demo_routes") / CLEAN_DAY
    planned = read_round(file.read_bytes(), file.name)
    script = read_script(file.read_bytes(), file.name, planned)
    time = Time(planned.round.zone)
    first = datetime.fromisoformat(planned.routes[0].day).date()
    time.begin(script.begins_at(first, time.zone) - timedelta(minutes=10))
    with make_node(folder / "central", time) as store:
        plan_at(store, file.name, file.read_bytes(), planned)
    with Process("central", folder / "central") as central:
        make_node(folder / "tablet", time).close()
        invite_and_enrol(folder / "central", folder / "tablet", central.url, nodes.SAMPLER)
        with Process("serve", folder / "tablet") as served:
            hand_over(folder / "tablet", "sync", {}, work.quiet)
            root = served.url.rstrip("/")
            with closing(Browser(root, nodes.SAMPLER)) as browser:
                status, _, page = browser.post(f"/kitchen/visits/{VISIT}/open", {})
                assert status == 303, page
                yield root, browser.cookie
