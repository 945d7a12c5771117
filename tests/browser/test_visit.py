"""The sampler's way at one tap in Chromium, at the size of a small phone; presses are counted."""

from datetime import timedelta

import pytest
from playwright.sync_api import Page, expect

from tests.browser.conftest import Day, choose

MOST_PRESSES = 14
"""An ordinary first-litre visit, no typing but the name. Source: practice R41, to be tried."""


class Hand:
    """Counts presses as a thumb makes them; a wedge scanner and typed letters are none."""

    def __init__(self, page: Page) -> None:
        self.page, self.presses = page, 0

    def press(self, what: str, *, exact: bool = False) -> None:
        """Press the one visible button, link or chip of that name, once it is there."""
        page = self.page
        button, link, chip = (
            page.get_by_role(role, name=what, exact=exact or role == "radio")
            for role in ("button", "link", "radio")
        )
        found = button.or_(link).or_(chip).first
        found.wait_for()
        found.evaluate("one => one.scrollIntoView({ block: 'center' })")  # as a thumb would
        found.click()
        self.presses += 1

    def scan(self, code: str) -> None:
        """Scan as a wedge scanner does: types into the field that has the focus, then Enter."""
        expect(self.page.locator("[data-scan]")).to_be_focused()
        self.page.keyboard.type(code)
        self.page.keyboard.press("Enter")


@pytest.mark.usefixtures("day")
def test_an_ordinary_first_litre_visit_takes_at_most_fourteen_presses(phone: Page, day: Day):
    choose(phone, day.tablet, "sampler-1")
    day.time.until(day.time.now() + timedelta(minutes=20))
    phone.goto(day.tablet + "/kitchen/")
    hand = Hand(phone)

    hand.press("Go to")
    hand.press("I am at the door")
    hand.press("Agreed")
    hand.press("22:00")
    hand.press("bath")
    hand.press("Yes, that is what was said")
    hand.press("Yes, cold")
    hand.press("No", exact=True)
    hand.press("Untouched")
    hand.press("No", exact=True)
    hand.scan(day.code("V-0401", 1))
    hand.press("Full to the line")
    phone.locator("#name").fill("W. Oddquist")
    hand.press("Sign and close")

    expect(phone.locator("h1")).to_contain_text("Closed")
    assert hand.presses <= MOST_PRESSES
