"""Codes photographed and filmed, and photos taken, in Chromium at the size of a small phone."""

import re
import threading
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Page, expect
from werkzeug.serving import make_server

from fieldapp.commands import drawing
from fieldapp.web import create_app
from tests.browser.conftest import FLAGS, PHONE, chromium
from tests.pictures import from_camera, jpeg, marked, photographed
from tests.tap import OTHER, SAMPLER, VISIT, Tap

FRAMES = 30
HERE = f"/kitchen/visits/{VISIT}"
SET, FILL = "Set bottle 1", "Fill bottle 1"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    with made.store.transaction():
        made.store.put("places", "kitchen bench")
    made.begin(VISIT)
    yield made
    made.store.close()


@pytest.fixture
def root(tap: Tap) -> Iterator[str]:
    server = make_server("127.0.0.1", 0, create_app(tap.store), threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.port}"
    server.shutdown()
    thread.join()
    server.server_close()


def choose(page: Page, root: str, path: str = HERE) -> None:
    page.goto(root + "/")
    with page.expect_navigation():
        page.click(f"button[value={SAMPLER}]")
    page.goto(root + path)


def picture(folder: Path, *codes: str, **how: float) -> Path:
    """Return the file that a camera would hand over."""
    file = folder / "IMG_0001.JPG"
    file.write_bytes(jpeg(photographed(*codes, **how)))
    return file


@contextmanager
def filming(browser: Browser, folder: Path, *codes: str) -> Iterator[Page]:
    """Give a page whose camera sees a label, held by hand."""
    film = folder / "camera.mjpeg"
    frames = [
        jpeg(photographed(*codes, turn=n - FRAMES / 2, blur=0.8).resize((640, 480)))
        for n in range(FRAMES)
    ]
    film.write_bytes(b"".join(frames))
    started = browser.browser_type.launch(
        executable_path=chromium(),
        args=[
            *FLAGS,
            "--use-fake-ui-for-media-stream",
            "--use-fake-device-for-media-stream",
            f"--use-file-for-fake-video-capture={film}",
        ],
    )
    faults: list[str] = []
    page = started.new_page(viewport=PHONE)
    page.on("pageerror", lambda fault: faults.append(str(fault)))
    page.on(
        "console",
        lambda said: faults.append(said.text) if "Content Security Policy" in said.text else None,
    )
    yield page
    started.close()
    assert faults == []


@pytest.fixture
def film(browser: Browser, tmp_path: Path) -> Iterator[Callable[..., Page]]:
    with ExitStack() as stack:
        yield lambda *codes: stack.enter_context(filming(browser, tmp_path, *codes))


def test_a_photographed_label_sets_the_bottle_at_once(tap, root, phone, tmp_path):
    choose(phone, root)
    expect(phone.locator("h1")).to_have_text(SET)
    file = picture(tmp_path, tap.codes[VISIT], turn=25, tilt=0.15, blur=0.8, noise=6)
    phone.set_input_files("#picture-code", file)
    expect(phone.locator("h1")).to_have_text(FILL)
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [tap.codes[VISIT]]


def test_a_photographed_label_sets_the_bottle_without_scripts(tap, root, browser, tmp_path):
    context = browser.new_context(viewport=PHONE, java_script_enabled=False)
    page = context.new_page()
    choose(page, root)
    page.set_input_files("#picture-code", picture(tmp_path, tap.codes[VISIT]))
    expect(page.locator("[data-camera-live]")).to_be_hidden()
    page.click("text=Bottle is in place")
    expect(page.locator("h1")).to_have_text(FILL)
    context.close()


def test_a_picture_without_a_code_is_said_and_the_next_one_is_read(tap, root, phone, tmp_path):
    choose(phone, root)
    phone.set_input_files("#picture-code", picture(tmp_path))
    expect(phone.locator("[data-camera-says]").first).to_contain_text("No bottle code can be read")
    expect(phone.locator("h1")).to_have_text(SET)
    assert tap.facts(VISIT, "bottle.set") == []
    phone.set_input_files("#picture-code", picture(tmp_path, tap.codes[VISIT]))
    expect(phone.locator("h1")).to_have_text(FILL)


def test_a_filmed_label_sets_the_bottle(tap, root, film):
    page = film(tap.codes[VISIT])
    choose(page, root)
    page.click("text=Use the camera")
    expect(page.locator("h1")).to_have_text(FILL, timeout=20_000)
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [tap.codes[VISIT]]


def test_the_camera_shows_what_it_sees_and_ends_at_a_press_and_when_the_page_is_left(
    tap, root, film
):
    page = film()
    choose(page, root)
    asked: list[str] = []
    page.on("request", lambda one: asked.append(one.url) if one.url.endswith("/scan") else None)
    for end in ("press", "escape", "leave"):
        page.click("text=Use the camera")
        expect(page.locator("video")).to_be_visible()
        expect(page.locator("dialog [data-camera-says]")).to_contain_text("Looking for the code")
        assert page.evaluate("document.querySelector('video').srcObject.active")
        with page.expect_request("**/scan"):
            pass
        if end == "press":
            page.click("text=Stop the camera")
        elif end == "escape":
            page.keyboard.press("Escape")
        else:
            page.evaluate(
                "Object.defineProperty(document, 'hidden', { get: () => true });"
                "document.dispatchEvent(new Event('visibilitychange'))"
            )
        expect(page.locator("video")).to_be_hidden()
        assert page.evaluate("document.querySelector('video').srcObject") is None
    assert asked
    assert tap.facts(VISIT, "bottle.set") == []


def test_a_browser_without_a_camera_says_what_to_do_instead(root, phone):
    choose(phone, root)
    phone.click("text=Use the camera")
    says = phone.locator("[data-camera-says]").first
    expect(says).to_have_text("The camera cannot be used here. Photograph the code, or type it.")
    expect(phone.locator("video")).to_be_hidden()


def test_a_page_of_another_machine_over_plain_http_offers_no_film(root, phone):
    # what a browser lends there: no mediaDevices at all
    phone.add_init_script("Object.defineProperty(navigator, 'mediaDevices', { value: undefined })")
    choose(phone, root)
    expect(phone.locator("label[for=picture-code]")).to_be_visible()
    expect(phone.locator("[data-camera-live]")).to_be_hidden()


def test_the_file_of_a_picture_is_reached_by_keyboard(root, phone):
    choose(phone, root)
    expect(phone.locator("#code")).to_be_focused()
    phone.keyboard.press("Tab")
    expect(phone.locator("#picture-code")).to_be_focused()
    with phone.expect_file_chooser():
        phone.keyboard.press("Space")


def test_a_wedge_scanner_types_beside_the_camera_as_before(tap, root, phone):
    choose(phone, root)
    expect(phone.locator("#code")).to_be_focused()
    phone.keyboard.type(tap.codes[VISIT].lower())
    phone.keyboard.press("Enter")
    expect(phone.locator("h1")).to_have_text(FILL)


def test_a_spare_is_photographed_into_its_field_and_the_press_stays_the_samplers(
    tap, root, phone, tmp_path
):
    spare = tap.spare()
    choose(phone, root, f"{HERE}/different")
    phone.click("text=Another bottle: broken, lost, dirty")
    phone.set_input_files("#picture-code", picture(tmp_path, spare))
    expect(phone.locator("#swap-code")).to_have_value(spare)
    assert tap.facts(VISIT, "bottle.set") == []
    phone.click("text=Take this bottle instead")
    expect(phone.locator("h1")).to_have_text(FILL)


def test_the_counter_receives_what_is_photographed_and_what_is_filmed(tap, root, film, tmp_path):
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    page = film(tap.codes[VISIT])
    choose(page, root, "/bench/")
    page.click("text=No scanner: photograph the code")
    page.set_input_files("#picture-bottle", picture(tmp_path, tap.codes[VISIT]))
    expect(page.locator("#answer")).to_contain_text(re.compile("In"))
    expect(page.locator(".counts")).to_contain_text("1 in")
    page.click("text=Use the camera")
    expect(page.locator("#answer")).to_contain_text("In already", timeout=20_000)
    with tap.pages() as pages:
        story = pages.story(f"bottle:{tap.codes[VISIT]}")
    assert sum(entry.fact.kind == "bottle.received" for entry in story) == 1


def test_a_photo_note_is_saved_and_seen_on_the_visits_pages(tap, root, phone, tmp_path):
    file = tmp_path / "IMG_0002.JPG"
    file.write_bytes(from_camera(6, marked(1200, 800)))
    choose(phone, root)
    phone.click('a:text-is("Photo")')
    phone.set_input_files("#photo-file", file)
    phone.fill("#caption", "A softener before the tap")
    phone.click("text=Save the photo")
    expect(phone.locator(".photo img")).to_have_count(1)
    small = "document.querySelector('{} img').naturalWidth"
    phone.wait_for_function(f"{small.format('.photo')} > 0")
    expect(phone.locator(".photo")).to_contain_text("A softener before the tap")
    phone.click("text=Back to the visit")
    expect(phone.locator("h1")).to_have_text(SET)
    phone.locator(".strip img").scroll_into_view_if_needed()
    phone.wait_for_function(f"{small.format('.strip')} > 0")
    assert len(tap.facts(VISIT, "photo.taken")) == 1


def test_a_tab_that_dies_before_the_press_costs_that_photo_and_no_other(tap, root, phone, tmp_path):
    file = tmp_path / "IMG_0003.JPG"
    choose(phone, root, f"{HERE}/photos")
    for number in range(2):
        file.write_bytes(jpeg(marked(300 + number, 200)))
        phone.set_input_files("#photo-file", file)
        phone.click("text=Save the photo")
        expect(phone.locator(".photo")).to_have_count(number + 1)
    phone.set_input_files("#photo-file", file)

    again = phone.context.new_page()  # the camera took the memory, the browser its tab
    phone.close()
    again.goto(f"{root}{HERE}/photos")

    expect(again.locator(".photo")).to_have_count(2)
    assert len(tap.facts(VISIT, "photo.taken")) == 2
