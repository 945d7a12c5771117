"""The crate in Chromium at the size of a small phone: scan, count, seal, hand over."""

from datetime import timedelta

import pytest
from playwright.sync_api import Page, expect

from fieldapp.domain.codes import grouped
from fieldapp.rehearsal.browser import Browser as Walker
from fieldapp.rehearsal.day import LastUse, VisitScript
from fieldapp.rehearsal.kitchen import Visit
from tests.browser.conftest import Day, choose
from tests.browser.test_accessible import violations

VISITS = ("V-0401", "V-0402")


@pytest.fixture(scope="module")
def drawn(day: Day) -> list[str]:
    """Draw the bottles of two visits by the form walker; give their codes."""
    walker = Walker(day.tablet)
    first = walker.open("/")
    walker.press(first, first.form("/person"), {"person": "sampler-1"})
    day.time.until(day.time.now() + timedelta(minutes=30))
    taken = []
    for visit in VISITS:
        codes = {draw: code for (of, draw), code in day.codes.items() if of == visit}
        script = VisitScript(visit, last_use=LastUse())
        Visit(walker, day.time, visit, script, codes, "Wrenna Oddquist").walk()
        taken += codes.values()
    return taken


def scan(page: Page, code: str) -> None:
    """Scan as a wedge scanner does, into the field that has the focus."""
    expect(page.locator("[data-scan]")).to_be_focused()
    with page.expect_navigation():
        page.keyboard.type(code)
        page.keyboard.press("Enter")


def press(page: Page, name: str) -> None:
    with page.expect_navigation():
        page.get_by_role("button", name=name).first.click()


def test_a_crate_is_packed_by_scans_sealed_and_handed_over(day: Day, drawn, phone: Page):
    choose(phone, day.tablet, "sampler-1")
    phone.goto(day.tablet + "/kitchen/routes/R-0504")
    # what was counted as it was signed for is not asked about again
    assert phone.locator(".crate-door").count() == 0
    with phone.expect_navigation():
        phone.get_by_role("link", name="Pack the crate").click()
    expect(phone.locator(".number")).to_have_text(f"0of {len(drawn)} in")
    assert violations(phone) == []
    phone.fill("#box", "3")
    phone.focus("#code")
    for code in drawn[:-1]:
        scan(phone, code)
    assert phone.locator(".number").inner_text().startswith(str(len(drawn) - 1))

    # the last one is somewhere else: nothing is sealed before somebody says where
    phone.locator("summary", has_text=grouped(drawn[-1])).locator(".tag").click()
    assert violations(phone) == []
    press(phone, "Left behind")
    expect(phone.locator("h1")).to_contain_text("Seal")
    assert violations(phone) == []

    phone.fill("#seal_1", "88 214")
    press(phone, "Close Cooler 3")
    expect(phone.locator("h1")).to_contain_text("Hand over")
    assert violations(phone) == []
    press(phone, "Night box")
    with phone.expect_navigation():
        phone.locator("a.counted__line", has_text="Cooler 3").click()
    expect(phone.locator("main")).to_contain_text("Handed over to the night box")
    assert violations(phone) == []


@pytest.mark.parametrize(("width", "size"), [(320, "100%"), (640, "200%")])
def test_no_page_of_the_crate_scrolls_sideways(width, size, day: Day, drawn, phone: Page):
    choose(phone, day.tablet, "sampler-1")
    phone.set_viewport_size({"width": width, "height": 700})
    for path in ("/kitchen/routes/R-0504", "/kitchen/routes/R-0504/count"):
        phone.goto(day.tablet + path)
        phone.evaluate("size => { document.documentElement.style.fontSize = size }", size)
        assert phone.evaluate("document.documentElement.scrollWidth") <= width
