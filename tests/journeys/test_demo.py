"""The demo as a newcomer has it: one command, a line that is cut and restored, and a clean end."""

import contextlib
import json
import os
import re
import signal
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path
from urllib import error, parse, request

import pytest

from fieldapp.projections import answers, rounds
from fieldapp.rehearsal import seen
from fieldapp.rehearsal.browser import Browser, Page, Trouble
from fieldapp.rehearsal.day import LastUse, VisitScript
from fieldapp.rehearsal.kitchen import Visit
from fieldapp.rehearsal.nodes import Time
from fieldapp.running import RUNNING
from fieldapp.store import REALM, Store
from sync.folder import FolderLock
from sync.verify import verify_folder
from tests.journeys import walks

PATIENCE_S = 60
SIGNER = "Wrenna Oddquist"


@dataclass
class Demo:
    """A running demo with its three addresses."""

    process: subprocess.Popen[str]
    folder: Path
    central: str
    tablet: str
    line: str
    said: list[str] = field(default_factory=list)

    def page(self) -> Page:
        """Return the page of the line as it stands."""
        return Browser(self.line).open("/")

    def press(self, name: str) -> Page:
        """Press a button of the line's page."""
        browser = Browser(self.line)
        page = browser.open("/")
        return browser.press(page, page.form(f"/{name}"))

    def sampler(self) -> Browser:
        """Return the sampler's browser at the tablet."""
        browser = Browser(self.tablet)
        page = browser.open("/")
        browser.press(page, page.form("/person"), {"person": "sampler-1"})
        return browser

    def send(self) -> Page:
        """Press *send and fetch* on the tablet."""
        browser = Browser(self.tablet)
        page = browser.open("/state")
        return browser.press(page, page.form("/state/send"))

    def clock(self, root: str) -> datetime:
        """Return what a node's clock shows."""
        return datetime.fromisoformat(raw(root, "kitchen/clock"))

    def walk(self, visit: str, script: VisitScript) -> datetime | None:
        """Walk a visit; of one left to wait, return when it rings."""
        time = Time.of("America/Boise", [self.folder / "central"])
        codes = codes_of(self.folder / "central", visit)
        return Visit(self.sampler(), time, visit, script, codes, SIGNER).walk()

    def pids(self) -> list[int]:
        """Return the process of each node."""
        files = [self.folder / name / RUNNING for name in ("central", "tablet")]
        return [int(json.loads(file.read_text("utf-8"))["pid"]) for file in files]

    def end(self) -> str:
        """Press Ctrl-C and return what is said last."""
        self.process.send_signal(signal.SIGINT)
        out, err = self.process.communicate(timeout=PATIENCE_S)
        assert (self.process.returncode, err) == (0, "")
        return out


@contextlib.contextmanager
def demo(tmp_path: Path, keep: Path | None = None) -> Iterator[Demo]:
    """Start the demo as a person does, in an empty home; it ends with the block at the latest."""
    home, spare = tmp_path / "home", tmp_path / "spare"
    home.mkdir(exist_ok=True)
    spare.mkdir(exist_ok=True)
    more = ["--keep", str(keep)] if keep else []
    with started(home, spare, *more) as process:
        assert process.stdout is not None
        said = []
        for line in process.stdout:
            said.append(line.rstrip())
            if "Ctrl-C" in line:
                break
        urls = [found[0] for line in said if (found := re.findall(r"http://\S+", line))]
        assert len(urls) == 3, said
        folder = keep or next(spare.glob("demo-*"))
        yield Demo(process, folder, *urls, said)


@contextlib.contextmanager
def started(home: Path, spare: Path, *more: str) -> Iterator[subprocess.Popen[str]]:
    process = subprocess.Popen(
        [sys.executable, "-m", "fieldapp.cli", "demo", *more],
        env=walks.bare(home, spare),
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    with process:
        try:
            yield process
        finally:
            if process.poll() is None:
                process.terminate()  # its nodes end with it; a killed demo would leave them


def raw(root: str, path: str) -> str:
    """Return a page as it was sent."""
    opener = request.build_opener(request.ProxyHandler({}))
    with opener.open(root + path, timeout=PATIENCE_S) as answer:
        return str(answer.read().decode())


def codes_of(central: Path, visit: str) -> dict[int, str]:
    """Return the codes printed for a visit, by draw."""
    with contextlib.closing(
        sqlite3.connect(f"file:{central / 'ledger.db'}?mode=ro", uri=True)
    ) as db:
        asked = "SELECT draw, bottle FROM p_bottle WHERE printed_for = ?"
        return dict(db.execute(asked, (visit,)).fetchall())


def nothing_left(pids: list[int], urls: list[str]) -> bool:
    for pid in pids:
        with pytest.raises(ProcessLookupError):
            os.kill(pid, 0)
    for url in urls:
        with pytest.raises(error.URLError):
            raw(url, "")
    return True


def test_a_newcomer_cuts_the_line_works_on_restores_it_and_ends_it_all(tmp_path: Path) -> None:
    with demo(tmp_path) as shown:
        pids, urls = shown.pids(), [shown.central, shown.tablet, shown.line]
        begun = shown.page()
        assert begun.marks["data-mark-up"] == "yes"
        assert begun.marks["data-mark-waiting"] == "0"
        assert begun.marks["data-mark-filled"] == "0"

        # no line: the whole visit is walked all the same
        assert shown.press("cut").marks["data-mark-up"] == "no"
        assert shown.walk("V-0701", VisitScript("V-0701")) is None
        alone = shown.page().marks
        assert int(alone["data-mark-waiting"]) > 10
        assert alone["data-mark-filled"] == "0"
        assert alone["data-mark-held"] == begun.marks["data-mark-held"]
        assert "the line failed" in parse.unquote_plus(shown.send().url)
        assert shown.page().marks == alone

        # the line is back, and breaks once more in the middle of the exchange
        assert shown.press("restore").marks["data-mark-up"] == "yes"
        shown.press("cut-soon")
        assert "the line failed" in parse.unquote_plus(shown.send().url)
        torn = shown.page().marks
        assert (torn["data-mark-up"], torn["data-mark-cuts"]) == ("no", "2")
        assert torn["data-mark-waiting"] == alone["data-mark-waiting"]
        shown.press("restore")
        assert "Sent" in parse.unquote_plus(shown.send().url)
        whole = shown.page().marks
        assert whole["data-mark-waiting"] == "0"
        assert whole["data-mark-filled"] == "1"
        assert whole["data-mark-held"] == whole["data-mark-recorded"]

        # half an hour passes everywhere at once
        before = shown.clock(shown.tablet)
        shown.press("later")
        for root in (shown.tablet, shown.central):
            assert shown.clock(root) - before >= timedelta(minutes=30)

        # a wait begins on the tablet; the page goes to its end
        assert "No wait runs" in raw(shown.line, "?said=no-ring")
        use = LastUse(exact="at", where="bath", hours_before=3)
        until = shown.walk("V-0704", VisitScript("V-0704", waits="away", last_use=use))
        assert until is not None
        assert shown.clock(shown.tablet) < until
        assert shown.page().marks["data-mark-ring"]
        shown.press("ring")
        assert shown.clock(shown.tablet) >= until
        assert shown.clock(shown.central) >= until

        assert raw(shown.line, "static/css/line.css")
        assert "nothing is left" in shown.end()
    assert nothing_left(pids, urls)
    assert list((tmp_path / "spare").iterdir()) == []
    assert list((tmp_path / "home").iterdir()) == []


def test_a_kept_demo_goes_on_where_it_was_and_its_year_before_holds(tmp_path: Path) -> None:
    keep = tmp_path / "kept"
    with demo(tmp_path, keep) as shown:
        shown.press("later")
        shown.walk("V-0706", VisitScript("V-0706"))
        clock = shown.clock(shown.tablet)
        assert f"Kept in {keep}" in shown.end()
    for name in ("central", "tablet"):
        with FolderLock(keep / name):
            pass
        assert verify_folder(keep / name, REALM).first_fault is None
    with demo(tmp_path, keep) as shown:
        assert "Going on where it was." in shown.said
        assert shown.clock(shown.tablet) >= clock
        assert int(shown.page().marks["data-mark-waiting"]) > 10
        shown.send()
        assert shown.page().marks["data-mark-filled"] == "1"
        shown.end()
    with Store.open(keep / "central") as store, store.pages() as pages:
        now = store.clock.read().at
        totals = rounds.totals(pages, "quillhaven-before")
        assert [totals[name] for name in ("issued", "filled", "received", "resulted")] == [
            12, 12, 12, 11,
        ]  # fmt: skip
        settled = pages.findings(now, round_id="quillhaven-before", settled=True)
        assert sorted(one["kind"] for one in settled if one["settled"]) == [
            "received-twice", "results-differ",
        ]  # fmt: skip
        assert pages.findings(now) == []
        figures = answers.figures(pages, pages.round("quillhaven-before"), now)
        assert {str(one.answer.analyte): one.answer.n for one in figures} == {
            "lead": 9, "copper": 9,
        }  # fmt: skip
        planned = {str(row["route"]): str(row["day"]) for row in pages.routes()}
        day = datetime.fromisoformat(planned["lamp-hill"])
        assert day - datetime.fromisoformat(planned["whole-town"]) == timedelta(days=364)


def test_a_demo_that_is_told_to_end_while_it_makes_the_town_leaves_nothing(tmp_path: Path) -> None:
    home, spare = tmp_path / "home", tmp_path / "spare"
    home.mkdir()
    spare.mkdir()
    with started(home, spare) as process:
        assert process.stdout is not None
        assert "Making the town" in next(iter(process.stdout))
        process.terminate()
        assert process.wait(PATIENCE_S) == 1
    assert list(spare.iterdir()) == []


def test_a_folder_that_no_demo_made_is_left_as_it_is(tmp_path: Path) -> None:
    keep = tmp_path / "kept"
    Store.open(keep / "central").close()
    before = sorted(path.name for path in (keep / "central").iterdir())
    done = walks.command("demo", "--keep", str(keep))
    assert done.exit_code == 1
    assert "--keep" in done.stderr
    assert sorted(path.name for path in (keep / "central").iterdir()) == before


def test_another_sites_page_presses_nothing(tmp_path: Path) -> None:
    with demo(tmp_path) as shown:
        form = shown.page().form("/cut")
        token = form.fields["token"]
        for fields, headers in (
            ({}, {}),
            ({"token": "guessed"}, {}),
            ({"token": token}, {"Origin": "http://elsewhere.example"}),
            ({"token": token}, {"Host": "elsewhere.example"}),
        ):
            asked = request.Request(
                f"{shown.line}cut", data=parse.urlencode(fields).encode(), headers=headers
            )
            with pytest.raises(error.HTTPError) as refused:
                request.build_opener(request.ProxyHandler({})).open(asked, timeout=PATIENCE_S)
            assert refused.value.code in (400, 403)
            refused.value.close()
        assert shown.page().marks["data-mark-up"] == "yes"
        with pytest.raises(Trouble, match="405"):
            Browser(shown.line).open("/cut")
        assert len(seen.bottles(shown.folder / "central")) == 11
        shown.end()
