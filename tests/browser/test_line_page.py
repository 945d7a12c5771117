"""The demo's page in Chromium: axe finds nothing on it, and it follows what happens elsewhere."""

import re
from collections.abc import Iterator
from urllib.parse import urlsplit

import pytest
from playwright.sync_api import Page, expect

from fieldapp import work
from fieldapp.rehearsal.browser import Browser
from fieldapp.rehearsal.line_page import LinePage
from fieldapp.rehearsal.relay import Relay
from fieldapp.rehearsal.stage import Stage
from fieldapp.rehearsal.way import choose
from fieldapp.running import hand_over
from tests.browser.conftest import Day
from tests.browser.test_accessible import violations


@pytest.fixture(scope="module")
def line(day: Day) -> Iterator[tuple[LinePage, Stage]]:
    """Serve the page of a line to the day's central; the tablet sends past it."""
    with Relay(urlsplit(day.central).port or 0) as relay:
        stage = Stage(
            time=day.time, relay=relay, nodes=(), central=day.folder / "central",
            tablet=day.folder / "tablet", central_url=day.central, tablet_url=day.tablet,
            labels=day.folder / "labels.pdf",
        )  # fmt: skip
        with LinePage(stage) as page:
            yield page, stage


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_the_page_passes_axe_up_and_cut_and_fits_a_small_phone(line, phone: Page, scheme) -> None:
    shown, _ = line
    phone.emulate_media(color_scheme=scheme)
    phone.set_viewport_size({"width": 320, "height": 700})
    phone.goto(shown.url)
    assert violations(phone) == []
    phone.locator("#press-cut").click()
    expect(phone.locator("h1")).to_have_text("The line is cut")
    assert violations(phone) == []
    assert phone.evaluate("document.documentElement.scrollWidth") <= 320
    phone.locator("#press-restore").click()
    expect(phone.locator("h1")).to_have_text("The line is up")


def test_the_page_follows_by_itself_and_leaves_a_button_with_the_focus_alone(
    line, day: Day, desktop: Page
) -> None:
    shown, stage = line
    desktop.goto(shown.url)
    waiting = int(desktop.locator("#tablet").get_attribute("data-mark-waiting") or "-1")
    desktop.locator("#press-later").focus()
    browser = Browser(day.tablet)
    choose(browser, "sampler-1")
    page = browser.open("/kitchen/visits/V-0401")
    form = page.main()
    assert form is not None
    browser.press(page, form)
    more = re.compile(rf"^{waiting + 1} ")
    expect(desktop.locator("#tablet .number")).to_have_text(more)
    stage.relay.cut()
    expect(desktop.locator("h1")).to_have_text("The line is cut")
    assert desktop.evaluate("document.activeElement.id") == "press-later"
    stage.relay.restore()
    hand_over(day.folder / "tablet", "sync", {}, work.quiet)
    expect(desktop.locator("#tablet .number")).to_have_text(re.compile(r"^0 "))
