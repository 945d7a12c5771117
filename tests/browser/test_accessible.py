"""Every page that is read passes axe, on a phone and on a desk; a route without a row fails."""

import re
from urllib.parse import urlsplit

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Page

from fieldapp.domain.timetext import to_utc
from fieldapp.rehearsal.browser import Browser as Walker
from fieldapp.rehearsal.day import LastUse, VisitScript
from fieldapp.rehearsal.kitchen import Visit
from fieldapp.store import Store
from fieldapp.web import create_app
from tests.browser.conftest import Day, choose

NOT_PAGES = {
    "kitchen.clock": "a line of text for the countdown",
    "static_file": "styles and scripts",
    "replication.door": "the door for devices, by POST",
    "bench.cards": "a page to print, as PDF",
    "coolers.record": "a page to print, as PDF",
    "coolers.sheet": "the signed sheet as it was kept",
    "photos.picture": "a photo",
    "photos.small": "a photo at the size of a list",
    "desk.find": "redirects to a bottle or a site",
}
ROWS = {
    "people.first": ("tablet", "/"),
    "state.waiting": ("tablet", "/state"),
    "kitchen.index": ("tablet", "/kitchen/"),
    "kitchen.route": ("tablet", "/kitchen/routes/R-0504"),
    "kitchen.visit": ("tablet", "/kitchen/visits/V-0401"),
    "kitchen.different": ("tablet", "/kitchen/visits/V-0401/different"),
    "kitchen.done": ("tablet", "/kitchen/visits/V-0401/done"),
    "kitchen.last_use": ("tablet", "/kitchen/visits/V-0401/last-use"),
    "photos.of_visit": ("tablet", "/kitchen/visits/V-0401/photos"),
    "crate.count": ("tablet", "/kitchen/routes/R-0504/count"),
    "crate.cooler": ("tablet", "/kitchen/coolers/{cooler}"),
    "bench.index": ("central", "/bench/"),
    "bench.open_form": ("central", "/bench/open"),
    "bench.which": ("central", "/bench/which?seals=88214&whole=whole&count=17"),
    "desk.index": ("central", "/desk/"),
    "desk.one_round": ("central", "/desk/rounds/quillhaven-2027-05"),
    "desk.one_bottle": ("central", "/desk/bottles/{bottle}"),
    "coolers.of_round": ("central", "/desk/rounds/quillhaven-2027-05/coolers"),
    "coolers.one_cooler": ("central", "/desk/coolers/{cooler}"),
    "story.bottle": ("tablet", "/story/{bottle}"),
    "story.visit": ("tablet", "/story/visits/V-0404"),
    "story.entry": ("tablet", "/story/entries/{entry}"),
    "desk.one_finding": ("central", "/desk/findings/{finding}"),
}


def violations(page: Page) -> list[str]:
    """Return what axe finds, a line each with the element."""
    found = Axe().run(page).response["violations"]
    return [
        f"{one['id']}: {one['help']} {node['html'][:160]}" for one in found for node in one["nodes"]
    ]


def test_every_route_that_is_read_has_a_row(tmp_path):
    with Store.open(tmp_path / "node") as store:
        rules = list(create_app(store).url_map.iter_rules())
    read = {rule.endpoint for rule in rules if "GET" in (rule.methods or ())}

    assert read - set(ROWS) - set(NOT_PAGES) == set()
    assert set(ROWS) <= read


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("endpoint", sorted(ROWS))
def test_a_page_passes_axe(endpoint: str, scheme, worked: Day, desktop: Page, phone: Page):
    node, path = ROWS[endpoint]
    page, root = (phone, worked.tablet) if node == "tablet" else (desktop, worked.central)
    choose(page, root, "sampler-1" if node == "tablet" else "coordinator-1")
    page.emulate_media(color_scheme=scheme)

    answer = page.goto(root + path.format(**worked.found))

    assert answer is not None
    assert answer.status == 200
    assert violations(page) == []


def test_every_step_of_a_pair_and_of_a_visit_that_waits_passes_axe(day: Day, phone: Page):
    choose(phone, day.tablet, "sampler-1")
    seen: set[str] = set()

    class Looking(Walker):
        """A walker that has Chromium look at each page before it presses."""

        def press(self, page, form, given=None):
            phone.goto(page.url)
            heading = phone.locator("h1").first.inner_text()
            seen.add(re.sub(r"\d+", "n", heading))
            assert violations(phone) == [], heading
            return super().press(page, form, given)

    walker = Looking(day.tablet)
    first = walker.open("/")
    Walker.press(walker, first, first.form("/person"), {"person": "sampler-1"})
    for visit, script in (
        ("V-0403", VisitScript("V-0403", last_use=LastUse("at", "bath", "01:00", "", None))),
        ("V-0404", VisitScript("V-0404", waits="away")),
        ("V-0408", VisitScript("V-0408", waits="away")),
    ):
        codes = {draw: code for (of, draw), code in day.codes.items() if of == visit}
        day.time.until(to_utc("2027-05-04T06:20", day.time.zone))
        back = Visit(walker, day.time, visit, script, codes, "W. Oddquist").walk()
        while back is not None:
            day.time.until(back)
            back = Visit(walker, day.time, visit, script, codes, "W. Oddquist").walk()

    assert {"Ask", "Sign", "Fill bottle n", "Set bottle n", "Fill n to n", "Run", "Wait"} <= seen


@pytest.mark.parametrize(("width", "size"), [(320, "100%"), (640, "200%")])
def test_no_page_of_the_tablet_scrolls_sideways(width, size, worked: Day, phone: Page):
    # WCAG 2.2: 1.4.10 reflow at 320 pixels, 1.4.4 text at twice its size
    choose(phone, worked.tablet, "sampler-1")
    phone.set_viewport_size({"width": width, "height": 700})
    for node, path in ROWS.values():
        if node == "tablet":
            phone.goto(worked.tablet + path.format(**worked.found))
            phone.evaluate("size => { document.documentElement.style.fontSize = size }", size)
            wide = phone.evaluate("document.documentElement.scrollWidth")
            assert wide <= width, (urlsplit(phone.url).path, wide)
