"""The counter at speed in Chromium: scans that come while one is answered wait, none is lost."""

import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import Page, expect
from werkzeug.serving import make_server

from fieldapp.web import create_app
from tests.counter import Node

MANY = 40


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
    server = make_server("127.0.0.1", 0, create_app(node.store), threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    desktop.goto(f"http://127.0.0.1:{server.port}/")
    desktop.click("button[value=clerk-1]")
    expect(desktop.locator("#bottle")).to_be_focused()
    yield desktop
    desktop.goto("about:blank")
    server.shutdown()
    thread.join()
    server.server_close()


def scan(page: Page, text: str) -> None:
    """Type as a wedge scanner does, wherever the cursor is."""
    page.keyboard.type(text)
    page.keyboard.press("Enter")


@pytest.mark.parametrize("node", [MANY], indirect=True)
def test_forty_scans_in_a_row_are_all_in_and_numbered_without_a_gap(node, counter):
    counter.fill("#laboratory_number", "26-0001")
    counter.focus("#bottle")
    for code in node.codes.values():
        scan(counter, code)
    expect(counter.locator(".counts")).to_contain_text(f"{MANY} in", timeout=30_000)
    with node.pages() as pages:
        rows = pages.rows("SELECT bottle, laboratory_number AS number FROM p_bottle")
    assert {row["bottle"]: row["number"] for row in rows} == {
        code: f"26-{number:04d}" for number, code in enumerate(node.codes.values(), start=1)
    }


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
