"""The half hour in Chromium on a small phone: it runs, waits, is reloaded, rings and goes on."""

import re
from datetime import datetime, timedelta

import pytest
from playwright.sync_api import Page, expect

from tests.browser.conftest import Day, choose
from tests.browser.test_visit import Hand

VISIT = "V-0408"

RINGS = """
const rang = what => { document.documentElement.dataset.rang += what + " " }
window.AudioContext = class {
  currentTime = 0
  constructor() { rang("sound") }
  createOscillator() { return { frequency: {}, connect: next => next, start() {}, stop() {} } }
  createGain() {
    const gain = { setValueAtTime() {}, exponentialRampToValueAtTime() {} }
    return { gain, connect: next => next }
  }
}
navigator.vibrate = () => { rang("shake"); return true }
"""
"""Stands in for loudspeaker and motor, which this machine has not."""


def until(page: Page) -> datetime:
    """Return the instant to which the page counts down."""
    return datetime.fromisoformat(
        page.locator("time[data-countdown]").first.get_attribute("datetime") or ""
    )


@pytest.mark.usefixtures("day")
def test_a_half_hour_is_waited_for_reloaded_and_drawn(phone: Page, day: Day):
    phone.add_init_script(RINGS)
    choose(phone, day.tablet, "sampler-1")
    day.time.until(day.time.now() + timedelta(minutes=20))
    here = f"{day.tablet}/kitchen/visits/{VISIT}"
    phone.goto(here)
    hand = Hand(phone)

    hand.press("I am at the door")
    hand.press("Agreed")
    hand.press("Yes, cold")
    hand.press("No", exact=True)
    hand.press("Untouched")
    hand.press("Nobody will")
    hand.press("The tap is open")
    expect(phone.locator("h1")).to_have_text("Run")
    run_ends = until(phone)
    assert run_ends - day.time.now() <= timedelta(minutes=5)
    phone.reload()
    assert until(phone) == run_ends

    day.time.until(run_ends)
    phone.reload()
    hand.press("The tap is shut")
    expect(phone.locator("h1")).to_have_text("Wait")
    ends = until(phone)
    assert timedelta(minutes=29) < ends - day.time.now() <= timedelta(minutes=30)
    assert not phone.get_by_text("Too early").count()

    day.time.until(day.time.now() + timedelta(minutes=12))
    phone.reload()
    assert until(phone) == ends
    expect(phone.locator("time[data-countdown]")).to_have_text(re.compile(r"1[78]:\d\d"))
    phone.goto(f"{day.tablet}/kitchen/")
    expect(phone.locator("h1")).to_have_text("Next to ring: Q-0441")
    wide = phone.evaluate("document.documentElement.scrollWidth")
    assert wide <= 360

    # a second before the end the page is opened; it ends, rings, shakes and asks the node
    phone.goto(here)
    day.time.until(ends - timedelta(seconds=1))
    phone.reload()
    rang = re.compile("sound shake")
    expect(phone.locator("html")).to_have_attribute("data-rang", rang)
    expect(phone.locator("h1")).to_have_text("Set bottle 1", timeout=8000)

    hand.scan(day.code(VISIT, 1))
    expect(phone.locator("h1")).to_have_text("Set bottle 2")
    hand.scan(day.code(VISIT, 2))
    hand.press("The tap is open")
    hand.press("Tap is closed, all 2 full")
    hand.press("No", exact=True)
    phone.locator("#name").fill("W. Oddquist")
    hand.press("Sign and close")

    expect(phone.locator("h1")).to_contain_text("Closed")
    expect(phone.locator("main")).to_contain_text("30 min, measured")
    expect(phone.locator("main")).to_contain_text("Nothing was different")
    phone.get_by_role(
        "link", name=re.compile("^[0-9A-Z]{4}-[0-9A-Z]{4}-[0-9A-Z]{3}$")
    ).first.click()
    expect(phone.locator("main")).to_contain_text("The story of bottle")
    expect(phone.locator("main")).to_contain_text("Tap shut after running to waste")
