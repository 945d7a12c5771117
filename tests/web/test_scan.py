"""A photographed code stands in the form as if it had been typed; a picture is read by the node."""

import io
from collections.abc import Iterator
from pathlib import Path

import pytest

from fieldapp.commands import drawing
from tests.pictures import jpeg, marked, photographed
from tests.tap import OTHER, SAMPLER, VISIT, Tap
from tests.web.reader import Reader, words

HERE = f"/kitchen/visits/{VISIT}"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    made.begin(VISIT)
    yield made
    made.store.close()


@pytest.fixture
def sampler(tap: Tap) -> Reader:
    return Reader(tap, SAMPLER)


def brought(*codes: str, **how: float) -> tuple[io.BytesIO, str]:
    return io.BytesIO(jpeg(photographed(*codes, **how))), "IMG_0001.JPG"


def test_a_photographed_label_sets_the_bottle_without_a_script(tap, sampler):
    picture = brought(tap.codes[VISIT], turn=20, tilt=0.1, blur=0.8, noise=6)
    page = sampler.land(HERE, f"{HERE}/set", code="", picture=picture)
    assert "Fill bottle 1" in words(page)
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [tap.codes[VISIT]]


def test_what_is_typed_counts_before_a_picture(tap, sampler):
    picture = brought(tap.codes[OTHER])
    sampler.land(HERE, f"{HERE}/set", code=tap.codes[VISIT], picture=picture)
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [tap.codes[VISIT]]


def test_a_picture_without_a_code_is_said_above_the_step_and_records_nothing(tap, sampler):
    picture = io.BytesIO(jpeg(marked())), "x.jpg"
    answer = sampler.send(HERE, f"{HERE}/set", code="", picture=picture)
    assert answer.status_code == 422
    assert "No bottle code can be read in that picture" in words(answer.text)
    assert "Set bottle 1" in words(answer.text)
    assert tap.facts(VISIT, "bottle.set") == []


def test_an_empty_file_field_is_no_picture(tap, sampler):
    answer = sampler.send(HERE, f"{HERE}/set", code="", picture=(io.BytesIO(b""), ""))
    assert answer.status_code == 422
    assert "Scan or type the code" in words(answer.text)


def test_the_photographed_bottle_of_another_site_gets_its_three_ways(tap, sampler):
    answer = sampler.send(HERE, f"{HERE}/set", code="", picture=brought(tap.codes[OTHER]))
    assert answer.status_code == 422
    for way in ("Take another bottle", "Leave, come back later", "It is already done"):
        assert way in words(answer.text)


def test_the_same_act_with_another_photographed_bottle_is_a_conflict(tap, sampler):
    form = sampler.hidden(HERE, f"{HERE}/set")
    spare = tap.spare()
    first = sampler.client.post(f"{HERE}/set", data={**form, "picture": brought(spare)})
    again = sampler.client.post(f"{HERE}/set", data={**form, "picture": brought(spare)})
    other = sampler.client.post(f"{HERE}/set", data={**form, "picture": brought(tap.codes[VISIT])})
    assert [first.status_code, again.status_code, other.status_code] == [303, 303, 409]
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [spare]


def test_a_photographed_spare_takes_a_broken_bottles_place(tap, sampler):
    spare = tap.spare()
    more = f"{HERE}/different"
    sampler.land(more, f"{HERE}/swap", draw="1", why="broken", code="", picture=brought(spare))
    assert [one.bottle for one in tap.facts(VISIT, "bottle.set")] == [spare]


def scan(sampler: Reader, picture: object, **fields: str):
    token = sampler.hidden(HERE, f"{HERE}/set")["token"]
    return sampler.client.post("/scan", data={"token": token, "picture": picture, **fields})


def test_a_script_is_told_the_code_and_nothing_is_recorded(tap, sampler):
    answer = scan(sampler, brought(tap.codes[VISIT], turn=33))
    assert (answer.status_code, answer.json) == (200, {"code": tap.codes[VISIT]})
    assert tap.facts(VISIT, "bottle.set") == []


def test_a_script_is_told_in_a_sentence_why_there_is_none(sampler):
    answer = scan(sampler, (io.BytesIO(jpeg(marked())), "x.jpg"))
    assert answer.status_code == 422
    assert answer.json["kind"] == "no-code-seen"
    assert "No bottle code can be read" in answer.json["says"]


def test_a_counter_is_told_any_one_code(sampler):
    answer = scan(sampler, brought("STICKER 0042"), want="any")
    assert answer.json == {"code": "STICKER 0042"}
    assert scan(sampler, brought("STICKER 0042")).status_code == 422
    both = scan(sampler, brought("STICKER 0042", "STICKER 0043", pixels=300), want="any")
    assert both.json["kind"] == "no-code-seen"


def test_every_step_that_asks_for_a_code_takes_a_picture_of_it(tap, sampler):
    for path in (HERE, f"{HERE}/different"):
        page = sampler.read(path)
        assert 'name="picture" accept="image/*" capture="environment"' in page
        assert 'enctype="multipart/form-data"' in page


def test_the_counter_takes_a_photographed_bottle_without_a_script(tap):
    clerk = Reader(tap, SAMPLER)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    answer = clerk.send("/bench/", "/bench/receive", bottle="", picture=brought(tap.codes[VISIT]))
    assert answer.status_code == 303
    with tap.pages() as pages:
        assert pages.bottle(tap.codes[VISIT])["outcome"] == "accepted"


def test_a_picture_without_a_code_is_a_stop_at_the_counter_and_the_number_stays(tap):
    clerk = Reader(tap, SAMPLER)
    picture = io.BytesIO(jpeg(marked())), "x.jpg"
    answer = clerk.send(
        "/bench/", "/bench/receive", bottle="", picture=picture, laboratory_number="W-17"
    )
    assert answer.status_code == 422
    assert "No bottle code can be read in that picture" in words(answer.text)
    assert "W-17" in answer.text


def test_the_crate_takes_a_photographed_bottle_without_a_script(tap, sampler):
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    page, pack = "/kitchen/routes/north/count", "/kitchen/routes/north/pack"
    nothing = io.BytesIO(jpeg(marked())), "x.jpg"
    answer = sampler.send(page, pack, box="3", code="", picture=nothing)
    assert answer.status_code == 422
    assert "No bottle code can be read in that picture" in words(answer.text)
    sampler.land(page, pack, box="3", code="", picture=brought(tap.codes[VISIT]))
    with tap.pages() as pages:
        story = [entry.fact.kind for entry in pages.story(f"bottle:{tap.codes[VISIT]}")]
    assert story[-1] == "bottle.packed"
