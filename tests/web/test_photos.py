"""Photos of a visit: saved before anything else, listed, served by the hash that an entry names."""

import io
import json
from collections.abc import Iterator
from pathlib import Path

import pytest
from PIL import Image

from fieldapp import identity, photos
from fieldapp.commands import kitchen
from fieldapp.commands import photos as notes
from fieldapp.domain.facts import PhotoTaken
from fieldapp.identity import new_act
from tests import nodes
from tests.pictures import from_camera, jpeg, marked
from tests.tap import OTHER, SAMPLER, VISIT, Tap
from tests.web.reader import Reader, words

PAGE = f"/kitchen/visits/{VISIT}/photos"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    yield made
    made.store.close()


@pytest.fixture
def sampler(tap: Tap) -> Reader:
    return Reader(tap, SAMPLER)


def brought(data: bytes) -> tuple[io.BytesIO, str]:
    return io.BytesIO(data), "IMG_0001.JPG"


def taken(tap: Tap, visit: str = VISIT) -> list[PhotoTaken]:
    return tap.facts(visit, "photo.taken")


def files(tap: Tap) -> list[Path]:
    return [path for path in (tap.store.folder / "blobs").rglob("*") if path.is_file()]


def test_a_photo_is_on_disk_noted_and_shown(tap, sampler):
    page = sampler.land(PAGE, PAGE, photo=brought(from_camera()), caption="A softener")
    (fact,) = taken(tap)
    assert (fact.about, fact.visit, fact.media) == (f"visit:{VISIT}", VISIT, "image/jpeg")
    assert photos.find(fact.photo, tap.store.folder).stat().st_size == fact.n
    assert f"/photos/{fact.photo}/small" in page
    assert "The photo is saved on this device" in page
    assert "A softener" in page


def test_the_entry_names_the_picture_and_the_caption_stays_out_of_what_is_signed(tap, sampler):
    sampler.land(PAGE, PAGE, photo=brought(from_camera()), caption="At Imaginary's sink")
    (fact,) = taken(tap)
    body = next(one for one in nodes.bodies(tap.store) if one["kind"] == "photo.taken")
    assert body["blobs"] == [{"h": fact.photo, "n": fact.n, "t": "image/jpeg"}]
    assert body["scope"] == ["route:north"]
    assert "Imaginary" not in json.dumps(body)


def test_the_picture_is_served_as_what_it_is_and_nothing_else(tap, sampler):
    sampler.land(PAGE, PAGE, photo=brought(from_camera()))
    (fact,) = taken(tap)
    for path in (f"/photos/{fact.photo}", f"/photos/{fact.photo}/small"):
        answer = sampler.client.get(path)
        assert answer.status_code == 200
        assert answer.mimetype == "image/jpeg"
        assert answer.headers["Content-Disposition"] == "inline"
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.headers["Cache-Control"].startswith("private")
        assert Image.open(io.BytesIO(answer.get_data())).format == "JPEG"
        answer.close()


def test_only_a_hash_that_an_entry_here_names_is_served(tap, sampler):
    orphan = photos.keep(jpeg(marked()), tap.store.folder)
    for path in (orphan.sha256, "0" * 64, "x", "..", "%2e%2e%2fledger.db"):
        assert sampler.client.get(f"/photos/{path}").status_code == 404
        assert sampler.client.get(f"/photos/{path}/small").status_code == 404


def test_a_document_is_handed_out_to_be_saved_never_shown_as_a_page_of_ours(tap, sampler):
    kept = photos.keep_document(b"%PDF-1.4\n<script>alert(1)</script>", tap.store.folder)
    tap.record(
        PhotoTaken(
            about=f"visit:{VISIT}", photo=kept.sha256, n=kept.n, media=kept.media, visit=VISIT
        )
    )
    answer = sampler.client.get(f"/photos/{kept.sha256}")
    assert answer.mimetype == "application/pdf"
    assert answer.headers["Content-Disposition"].startswith("attachment")
    assert sampler.client.get(f"/photos/{kept.sha256}/small").status_code == 404
    answer.close()


@pytest.mark.parametrize("media", ["text/html", "image/svg+xml", "image/png"])
def test_the_type_that_an_entry_states_is_not_believed(tap, sampler, media):
    data = jpeg(marked())
    kept = photos.keep(data, tap.store.folder)
    tap.record(
        PhotoTaken(about=f"visit:{VISIT}", photo=kept.sha256, n=kept.n, media=media, visit=VISIT)
    )
    answer = sampler.client.get(f"/photos/{kept.sha256}")
    assert answer.mimetype == "application/pdf"
    assert answer.headers["Content-Disposition"].startswith("attachment")
    answer.close()


def test_a_photo_may_be_of_a_bottle_or_of_a_difference_and_stands_in_its_story(tap, sampler):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.state_deviation, VISIT, kind="aerator-removed")
    code = tap.codes[VISIT]
    with tap.pages() as pages:
        entry = pages.story(f"visit:{VISIT}")[-1].hash
    for about in (f"bottle:{code}", f"entry:{entry}"):
        sampler.land(PAGE, PAGE, photo=brought(from_camera()), about=about)
    assert [one.about for one in taken(tap)] == [f"bottle:{code}", f"entry:{entry}"]
    with tap.pages() as pages:
        assert pages.story(f"bottle:{code}")[-1].fact == taken(tap)[0]


def test_a_photo_of_another_visits_bottle_is_refused_and_nothing_is_noted(tap, sampler):
    answer = sampler.send(
        PAGE, PAGE, photo=brought(from_camera()), about=f"bottle:{tap.codes[OTHER]}", caption="kept"
    )
    assert answer.status_code == 422
    assert "A photo here is of the visit" in words(answer.text)
    assert "kept" in answer.text
    assert taken(tap) == []


def test_a_photo_of_no_visit_is_not_found_and_not_kept(tap, sampler):
    form = sampler.hidden(PAGE, PAGE)
    path = PAGE.replace(VISIT, "V-9999")
    assert sampler.client.get(path).status_code == 404
    answer = sampler.client.post(path, data={**form, "photo": brought(from_camera())})
    assert answer.status_code == 404
    assert files(tap) == []


def test_nobody_takes_no_photo(tap):
    stranger = Reader(tap, "")
    answer = stranger.send(PAGE, PAGE, photo=brought(from_camera()))
    assert answer.status_code == 303
    assert answer.location.startswith("/?then=")
    assert files(tap) == []


def test_the_same_post_twice_is_one_photo(tap, sampler):
    form = sampler.hidden(PAGE, PAGE)
    for _ in range(3):
        answer = sampler.client.post(PAGE, data={**form, "photo": brought(from_camera())})
        assert answer.status_code == 303
    assert len(taken(tap)) == 1
    assert len(files(tap)) == 1


def test_another_photo_under_the_same_act_is_a_conflict(tap, sampler):
    form = sampler.hidden(PAGE, PAGE)
    sampler.client.post(PAGE, data={**form, "photo": brought(from_camera())})
    answer = sampler.client.post(PAGE, data={**form, "photo": brought(jpeg(marked(50, 90)))})
    assert answer.status_code == 409
    assert len(taken(tap)) == 1


def test_only_one_photo_is_taken_of_a_request_that_brings_several(tap, sampler):
    form = sampler.hidden(PAGE, PAGE)
    several = [brought(from_camera()), brought(jpeg(marked(50, 90)))]
    sampler.client.post(PAGE, data={**form, "photo": several})
    assert len(taken(tap)) == len(files(tap)) == 1


def test_a_kept_photo_whose_note_is_lost_is_kept_once_more_without_harm(tap, sampler, monkeypatch):
    # a node killed between the file and the entry: a file that nobody names, and the press again
    form = sampler.hidden(PAGE, PAGE)

    def killed(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as once:
        once.setattr("fieldapp.web.photos.perform", killed)
        with pytest.raises(KeyboardInterrupt):
            sampler.client.post(PAGE, data={**form, "photo": brought(from_camera())})
    assert (len(files(tap)), taken(tap)) == (1, [])
    sampler.client.post(PAGE, data={**form, "photo": brought(from_camera())})
    assert (len(files(tap)), len(taken(tap))) == (1, 1)


def test_no_room_is_said_and_what_was_typed_stays(tap, sampler, monkeypatch):
    monkeypatch.setattr("fieldapp.photos.ROOM", 2**62)
    answer = sampler.send(PAGE, PAGE, photo=brought(from_camera()), caption="A softener")
    assert answer.status_code == 422
    assert "too little room left for photos" in words(answer.text)
    assert "A softener" in answer.text
    assert (files(tap), taken(tap)) == ([], [])


def test_more_than_the_form_may_hold_is_too_large(tap, sampler):
    kind = "multipart/form-data; boundary=b"
    answer = sampler.client.post(PAGE, data=bytes(17 << 20), content_type=kind)
    assert answer.status_code == 413
    assert "too large" in words(answer.text)
    assert taken(tap) == []


def test_a_photo_is_taken_back_like_any_press(tap, sampler):
    sampler.land(PAGE, PAGE, photo=brought(from_camera()))
    back = f"/kitchen/visits/{VISIT}/take-back"
    assert "Photo saved" in sampler.read(PAGE)
    page = sampler.land(PAGE, back)
    assert taken(tap) == []
    assert "/small" not in page
    assert len(files(tap)) == 1, "nothing is deleted"


def test_a_photo_may_be_taken_before_the_door_and_after_the_visit_was_closed(tap, sampler):
    sampler.land(PAGE, PAGE, photo=brought(from_camera()))
    tap.begin(VISIT)
    tap.finish(VISIT)
    sampler.land(PAGE, PAGE, photo=brought(jpeg(marked(70, 70))), caption="The blue house")
    assert len(taken(tap)) == 2
    assert "The blue house" not in sampler.read(PAGE), "the site is not at hand any more (R6)"


def test_a_photo_of_a_paper_was_taken_when_it_says(tap, sampler):
    tap.clock.pass_by(hours=6)
    sampler.land(PAGE, PAGE, photo=brought(from_camera()), done_local="2027-05-04T06:10")
    (fact,) = taken(tap)
    assert (fact.done_at, fact.basis) == ("2027-05-04T12:10:00.000Z", "stated")


def test_every_page_of_a_visit_leads_to_its_photos_and_shows_them_small(tap, sampler):
    sampler.land(PAGE, PAGE, photo=brought(from_camera()))
    (fact,) = taken(tap)
    for path in (f"/kitchen/visits/{VISIT}", f"/kitchen/visits/{VISIT}/different"):
        page = sampler.read(path)
        assert f'href="{PAGE}"' in page
        assert f"/photos/{fact.photo}/small" in page


def test_a_photo_that_never_came_here_is_listed_without_its_picture(tap, sampler):
    tap.record(
        PhotoTaken(about=f"visit:{VISIT}", photo="0" * 64, n=9, media="image/jpeg", visit=VISIT)
    )
    page = sampler.read(PAGE)
    assert "not on this device" in page
    assert "<img" not in page
    assert "<img" not in sampler.read(f"/kitchen/visits/{VISIT}")


def test_photos_that_wait_are_counted_apart_in_the_line_below(tap, sampler):
    pin = {"url": "http://127.0.0.1:9", "dev": "D-0", "public_key": "A" * 43}
    identity.pin_central(tap.store.folder, pin)
    assert "Photo waiting" not in sampler.read(PAGE)
    for size in (40, 50):
        sampler.land(PAGE, PAGE, photo=brought(jpeg(marked(size, size))))
    page = words(sampler.read(PAGE))
    assert "Photo waiting (2)" in page
    assert "waiting to send" in page
    assert "2 photos wait" in words(sampler.read("/state"))


def test_a_command_that_notes_a_photo_knows_what_it_may_be_of(tap):
    with tap.pages() as pages:
        found = notes.subjects(pages, VISIT)
    assert found == [("visit", f"visit:{VISIT}"), ("bottle", f"bottle:{tap.codes[VISIT]}")]


def test_a_form_without_its_token_keeps_nothing(tap, sampler):
    answer = sampler.client.post(PAGE, data={"act": new_act(), "photo": brought(from_camera())})
    assert answer.status_code == 400
    assert files(tap) == []
