"""The counter at speed in Chromium: scans that come while one is answered wait, none is lost."""

import threading
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Page, expect
from werkzeug.serving import make_server

from fieldapp.web import create_app
from tests.browser.test_accessible import violations
from tests.counter import Node

MANY = 40
A_SCAN_EVERY_MS = 400
BEHIND = 3
"""So many scans lie between one and its answer in the slow test."""


@pytest.fixture
def node(tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[Node]:
    """Two filled bottles on the counter, or as many as the test names."""
    made = Node(tmp_path / "node")
    many = getattr(request, "param", 2)
    made.plan([f"Q-{number:04d}" for number in range(1, many + 1)])
    with made.store.transaction():
        made.store.put("places", "bench")
    for visit in made.codes:
        made.fill(visit)
    yield made
    made.store.close()


@pytest.fixture
def counter(node: Node, desktop: Page) -> Iterator[Page]:
    """The clerk's page of the counter."""
    with served(create_app(node.store)) as root:
        begin(desktop, root)
        yield desktop
        desktop.goto("about:blank")


@contextmanager
def served(app: Callable[..., Iterable[bytes]]) -> Iterator[str]:
    """Serve an application on this machine; gives its address."""
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.port}"
    finally:
        server.shutdown()
        thread.join()
        server.server_close()


def begin(page: Page, root: str) -> None:
    """Choose the clerk; the scan field is ready."""
    page.goto(root + "/")
    page.click("button[value=clerk-1]")
    expect(page.locator("#bottle")).to_be_focused()


class Slow:
    """An application whose receipts are answered when somebody lets them."""

    def __init__(self, app: Callable[..., Iterable[bytes]]) -> None:
        self.app = app
        self.gate = threading.Semaphore(0)

    def __call__(self, environ: dict[str, Any], start: Any) -> Iterable[bytes]:
        if environ["PATH_INFO"] == "/bench/receive":
            self.gate.acquire()
        return self.app(environ, start)


def scan(page: Page, text: str) -> None:
    """Type as a wedge scanner does, wherever the cursor is."""
    page.keyboard.type(text)
    page.keyboard.press("Enter")


def numbers(node: Node) -> dict[str, str]:
    """Return the laboratory's number of every bottle."""
    with node.pages() as pages:
        rows = pages.rows("SELECT bottle, laboratory_number AS number FROM p_bottle")
    return {row["bottle"]: row["number"] for row in rows}


def outcome(node: Node, code: str) -> str:
    """Return what the laboratory said of that bottle, empty for not received."""
    with node.pages() as pages:
        return str(pages.bottle(code)["outcome"])


@pytest.mark.parametrize("node", [MANY], indirect=True)
def test_forty_scans_in_a_row_are_all_in_and_numbered_without_a_gap(node, counter):
    counter.fill("#laboratory_number", "26-0001")
    counter.focus("#bottle")
    for code in node.codes.values():
        scan(counter, code)
    expect(counter.locator(".counts")).to_contain_text(f"{MANY} in", timeout=30_000)
    assert numbers(node) == {
        code: f"26-{number:04d}" for number, code in enumerate(node.codes.values(), start=1)
    }


@pytest.mark.parametrize("node", [MANY], indirect=True)
def test_forty_scans_at_400_ms_with_slow_answers_lose_none(node, desktop):
    slow = Slow(create_app(node.store))
    with served(slow) as root:
        begin(desktop, root)
        desktop.fill("#laboratory_number", "26-0001")
        desktop.focus("#bottle")
        for number, code in enumerate(node.codes.values()):
            if number >= BEHIND:
                slow.gate.release()
            # as a scanner types it: the last key comes 400 ms after the first
            desktop.keyboard.type(code, delay=A_SCAN_EVERY_MS / len(code))
            desktop.keyboard.press("Enter")
        expect(desktop.locator("[data-queue]")).to_contain_text(f"({BEHIND})")
        for _ in range(BEHIND):
            slow.gate.release()
        expect(desktop.locator(".counts")).to_contain_text(f"{MANY} in", timeout=30_000)
        desktop.goto("about:blank")
    assert numbers(node) == {
        code: f"26-{number:04d}" for number, code in enumerate(node.codes.values(), start=1)
    }


@pytest.fixture
def cooler(node: Node, counter: Page) -> Page:
    """Cooler 3 open on the counter, cooler 2 still on the road."""
    first, second, *more = node.codes
    node.pack("C-AAAAAA", "3", (first, *more), seals=("88 214",))
    node.pack("C-BBBBBB", "2", (second,), seals=("88 219",))
    counter.click("text=Open a cooler")
    expect(counter.locator("#seals")).to_be_focused()
    scan(counter, "88214")
    counter.check("#whole-whole")
    counter.fill("#count", str(1 + len(more)))
    counter.keyboard.press("Enter")
    expect(counter.locator("h1")).to_contain_text("Cooler 3, Tuesday")
    expect(counter.locator("#bottle")).to_be_focused()
    return counter


@pytest.mark.parametrize("node", [MANY + 1], indirect=True)
def test_a_cooler_of_forty_needs_no_mouse_and_no_click(node, cooler):
    strange = list(node.codes)[1]
    for visit, code in node.codes.items():
        if visit != strange:
            scan(cooler, code)
    expect(cooler.locator(".tally")).to_contain_text(f"{MANY} of {MANY} in", timeout=30_000)
    assert cooler.evaluate("document.activeElement.id") == "bottle"


def test_a_bottle_of_another_cooler_is_set_aside_by_two_and_enter(node, cooler):
    first, second = node.codes.values()
    scan(cooler, second)
    scan(cooler, first)
    expect(cooler.locator(".tally")).to_contain_text("1 of 1 in")
    expect(cooler.locator(".told--stop")).to_contain_text("still on the road")
    scan(cooler, "2")
    expect(cooler.locator(".tally")).to_contain_text("1 of another cooler")
    expect(cooler.locator(".told--stop")).to_have_count(0)
    assert outcome(node, second) == "held"


def test_a_bottle_of_another_cooler_is_kept_with_a_note_by_one_and_enter(node, cooler):
    second = list(node.codes.values())[1]
    scan(cooler, second)
    expect(cooler.locator("form[data-ways]")).to_be_visible()
    scan(cooler, "1")
    expect(cooler.locator("[data-note]")).to_be_focused()
    scan(cooler, "came in the same van")
    expect(cooler.locator(".told--in")).to_contain_text("Kept here with your note")
    assert outcome(node, second) == "accepted"


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_every_answer_of_an_open_cooler_passes_axe(node, cooler, scheme):
    first, second = node.codes.values()
    cooler.emulate_media(color_scheme=scheme, reduced_motion="reduce")
    for text, says in (
        (second, "still on the road"),
        ("COUNTER LEAK", "Scan it now"),
        (first, "The Desk decides"),
        ("COUNTER UNDO", "It is not received now"),
    ):
        scan(cooler, text)
        expect(cooler.locator(".told--new")).to_contain_text(says)
        assert violations(cooler) == [], text
    cooler.click("text=Finish this cooler")
    expect(cooler.locator("[data-word=finish]")).to_contain_text("1 missing")
    assert violations(cooler) == []


def test_a_card_is_for_the_next_bottle_however_fast_they_come(node, counter):
    first, second = node.codes.values()
    for text in ("COUNTER LEAK", first, second):
        scan(counter, text)
    expect(counter.locator(".counts")).to_contain_text("1 in · 1 held")
    assert (outcome(node, first), outcome(node, second)) == ("held", "accepted")


def test_the_undo_card_twice_takes_one_receipt_back(node, counter):
    first, second = node.codes.values()
    for text in (first, second, "COUNTER UNDO", "COUNTER UNDO"):
        scan(counter, text)
    expect(counter.locator(".told--stop")).to_contain_text("Nothing more is taken back")
    assert (outcome(node, first), outcome(node, second)) == ("accepted", "")


def test_a_stop_stays_in_sight_while_the_next_bottles_come_in(node, counter):
    first, second = node.codes.values()
    scan(counter, first[:-1] + ("0" if first[-1] != "0" else "1"))
    scan(counter, second)
    expect(counter.locator(".told--in")).to_be_visible()
    expect(counter.locator(".told--stop")).to_contain_text("Nothing was recorded")
    counter.click(".told__seen")
    expect(counter.locator(".told--stop")).to_have_count(0)
    assert counter.evaluate("document.activeElement.id") == "bottle"


def test_a_press_that_no_answer_reached_is_made_again_and_recorded_once(node, counter):
    code = next(iter(node.codes.values()))
    lost = []

    def lose_the_first_answer(route) -> None:
        if lost:
            route.continue_()
            return
        lost.append(route.fetch(max_redirects=0).status)
        route.abort()

    counter.route("**/bench/receive", lose_the_first_answer)
    scan(counter, code)
    expect(counter.locator(".counts")).to_contain_text("1 in", timeout=15_000)
    assert lost == [303]
    with node.pages() as pages:
        story = pages.story(f"bottle:{code}")
    assert sum(entry.fact.kind == "bottle.received" for entry in story) == 1
