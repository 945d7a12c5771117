"""The README's picture: taken here from the running program, kept when asked, looked at always.

``TAPWITNESS_PICTURE=docs/kitchen.png make test`` writes it anew; without that the test takes the
picture all the same and holds it against what a README picture must show.
"""

import os
from io import BytesIO
from pathlib import Path

from PIL import Image
from playwright.sync_api import Page

from tests.browser.conftest import Day, choose

ROOT = Path(__file__).resolve().parents[2]
GAP = 16


def test_the_readme_shows_the_program_as_it_looks(
    day: Day, worked: Day, phone: Page, desktop: Page
):
    choose(phone, day.tablet, "sampler-1")
    phone.goto(day.tablet + "/kitchen/")
    board = phone.screenshot()
    phone.goto(day.tablet + "/kitchen/visits/V-0404")
    door = phone.screenshot()
    choose(desktop, worked.central, "coordinator-1")
    desktop.goto(worked.central + "/desk/rounds/quillhaven-2027-05")
    desk = desktop.screenshot()

    picture = side_by_side(board, door, desk)

    assert len(picture.getcolors(1 << 24) or ()) > 50, "an empty page is no picture"
    if target := os.environ.get("TAPWITNESS_PICTURE"):
        picture.quantize(64).save(ROOT / target, optimize=True)
    shown = [line for line in (ROOT / "README.md").read_text("utf-8").splitlines() if "![" in line]
    assert shown, "the README has a picture"
    for line in shown:
        assert (ROOT / line.partition("](")[2].partition(")")[0]).is_file()


def side_by_side(*shots: bytes) -> Image.Image:
    """Return the screens beside each other at one height, on plain ground."""
    screens = [Image.open(BytesIO(shot)).convert("RGB") for shot in shots]
    height = min(screen.height for screen in screens)
    screens = [
        screen.resize((screen.width * height // screen.height, height)) for screen in screens
    ]
    width = sum(screen.width for screen in screens) + GAP * (len(screens) + 1)
    whole = Image.new("RGB", (width, height + 2 * GAP), "#dcd7ca")
    left = GAP
    for screen in screens:
        whole.paste(screen, (left, GAP))
        left += screen.width + GAP
    return whole
