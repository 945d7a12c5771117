"""What the small scripts add in the Kitchen: a post made again, a ring, one press one post."""

import re
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import Page, expect
from werkzeug.serving import make_server

from fieldapp.web import create_app
from tests.tap import OTHER, SAMPLER, VISIT, Tap


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    with made.store.transaction():
        made.store.put("places", "kitchen")
    yield made
    made.store.close()


@pytest.fixture
def kitchen(tap: Tap, phone: Page) -> Iterator[Page]:
    """The sampler's page of the first visit."""
    server = make_server("127.0.0.1", 0, create_app(tap.store), threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    root = f"http://127.0.0.1:{server.port}"
    phone.goto(root + "/")
    with phone.expect_navigation():
        phone.click(f"button[value={SAMPLER}]")
    phone.goto(f"{root}/kitchen/visits/{VISIT}")
    yield phone
    phone.goto("about:blank")
    server.shutdown()
    thread.join()
    server.server_close()


def test_a_press_that_nobody_hears_stays_on_the_page_and_is_made_once_later(
    tap: Tap, kitchen: Page
):
    kitchen.context.set_offline(True)
    kitchen.click("text=I am at the door")
    expect(kitchen.locator("[data-unsent]")).to_be_visible()
    assert tap.kinds(VISIT) == []

    kitchen.context.set_offline(False)

    expect(kitchen.locator("text=May water be drawn here today?")).to_be_visible()
    assert tap.kinds(VISIT) == ["visit.opened"]


def test_an_impatient_thumb_presses_once(tap: Tap, kitchen: Page):
    sent: list[str] = []
    kitchen.on("request", lambda one: sent.append(one.url) if one.method == "POST" else None)
    kitchen.dblclick("text=I am at the door")
    expect(kitchen.locator("text=May water be drawn here today?")).to_be_visible()
    assert len(sent) == 1
    assert tap.kinds(VISIT) == ["visit.opened"]


def test_what_is_chosen_is_read_back_where_the_thumb_is_and_recorded_in_one_press(
    tap: Tap, kitchen: Page
):
    kitchen.click("text=I am at the door")
    kitchen.click("text=Agreed")
    expect(kitchen.locator("button:has-text('Read it back')")).to_be_visible()
    kitchen.check("input[data-says='23:00']")
    kitchen.check("#where-toilet")
    expect(kitchen.locator("[data-readback-here]")).to_contain_text("6 h 45")
    expect(kitchen.locator("[data-readback-here]")).to_contain_text("About 23:00, toilet")

    kitchen.click("text=Yes, that is what was said")

    expect(kitchen.locator("text=Is this a cold tap")).to_be_visible()
    used = tap.facts(VISIT, "water.used")
    assert [(one.exact, one.where) for one in used] == [("about", "toilet")]


def test_a_typed_time_is_read_back_by_the_node(kitchen: Page):
    kitchen.click("text=I am at the door")
    kitchen.click("text=Agreed")
    kitchen.check("input[data-says='23:00']")
    kitchen.click("text=Another time, or between two")
    kitchen.fill("#at_local", "2027-05-03T21:10")
    expect(kitchen.locator("[data-readback-here]")).to_be_hidden()
    kitchen.click("button:has-text('Read it back')")
    expect(kitchen.locator("h1")).to_have_text("Read back")
    expect(kitchen.locator(".readback")).to_contain_text("21:10")


def test_a_wait_follows_the_nodes_clock_and_rings_at_its_end(tap: Tap, kitchen: Page):
    tap.begin(VISIT, hours=5)
    rung: list[bool] = []
    kitchen.expose_function("rang", lambda: rung.append(True))
    kitchen.add_init_script("navigator.vibrate = () => { window.rang() }")
    kitchen.clock.install(time="2031-01-01T00:00:00Z")  # the browser's own clock is years off
    kitchen.goto(kitchen.url + "?wait=1")
    left = kitchen.locator("time[data-ring]")
    assert 58 <= int(left.inner_text().partition(":")[0]) <= 59

    tap.clock.pass_by(minutes=59)
    kitchen.clock.fast_forward(61_000)  # the page asks the node once a minute
    expect(left).to_have_text(re.compile(r"^0:[1-5]\d$"))
    assert rung == []

    tap.clock.pass_by(minutes=2)
    kitchen.clock.run_for(59_000)
    expect(kitchen.locator("h1")).to_have_text("Set bottle 1")
    assert rung == [True]


def test_a_tablet_that_wakes_asks_the_node_for_the_time(tap: Tap, kitchen: Page):
    tap.begin(VISIT, hours=5)
    kitchen.goto(kitchen.url + "?wait=1")
    left = kitchen.locator("time[data-ring]")
    assert int(left.inner_text().partition(":")[0]) >= 58

    tap.clock.pass_by(minutes=30)
    kitchen.evaluate("document.dispatchEvent(new Event('visibilitychange'))")

    expect(left).to_have_text(re.compile(r"^2[89]:"))


def test_the_scan_field_is_ready_when_the_page_is(tap: Tap, kitchen: Page):
    tap.begin(VISIT)
    kitchen.reload()
    expect(kitchen.locator("#code")).to_be_focused()
    kitchen.keyboard.type(tap.codes[VISIT].lower())
    kitchen.keyboard.press("Enter")
    expect(kitchen.locator("h1")).to_have_text("Fill bottle 1")
