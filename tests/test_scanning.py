"""Codes read on the node from pictures as a hand takes them; and what is no code."""

import pytest
from PIL import Image, ImageDraw

from fieldapp.domain.codes import grouped
from fieldapp.photos import BadPicture
from fieldapp.scanning import NoCodeSeen, bottle_in, texts_in

from .pictures import bomb, encoded, from_camera, jpeg, marked, photographed, qr

CODE, OTHER = "2HB4X90TC7T", "F8QY40YGEC9"


@pytest.mark.parametrize("form", ["JPEG", "PNG", "WEBP"])
def test_a_code_held_flat_is_read(form):
    assert bottle_in(encoded(photographed(CODE), form)) == CODE


@pytest.mark.parametrize("turn", [0, 17, 45, 90, 133, 180, 270])
def test_a_label_held_at_any_turn_is_read(turn):
    assert bottle_in(jpeg(photographed(CODE, turn=turn, blur=0.8, noise=4), quality=60)) == CODE


@pytest.mark.parametrize("tilt", [0.1, 0.2, 0.3])
def test_a_label_seen_from_the_side_is_read(tilt):
    assert bottle_in(jpeg(photographed(CODE, turn=12, tilt=tilt, blur=0.8, noise=4))) == CODE


@pytest.mark.parametrize("seed", range(4))
def test_a_code_in_poor_light_is_read_at_the_second_try(seed):
    import zxingcpp

    seen = photographed(CODE, pixels=160, turn=31, tilt=0.15, blur=1.6, noise=80, seed=seed)
    once = zxingcpp.read_barcodes(seen, formats=zxingcpp.BarcodeFormat.QRCode)
    assert once == [], "the control: without the filter nothing is read"
    assert bottle_in(encoded(seen, "PNG")) == CODE


def test_a_label_with_a_scratch_and_a_drop_is_read():
    seen = photographed(CODE, pixels=420, turn=8)
    draw = ImageDraw.Draw(seen)
    draw.line((430, 480, 800, 560), fill=240, width=7)
    draw.ellipse((610, 500, 655, 545), fill=200)
    assert bottle_in(jpeg(seen)) == CODE


def test_a_photo_that_the_camera_only_marked_as_turned_is_read():
    assert bottle_in(from_camera(6, photographed(CODE).convert("RGB"))) == CODE


def test_a_large_photo_is_read():
    large = photographed(CODE, pixels=300).resize((5120, 3840))
    assert bottle_in(jpeg(large)) == CODE


def test_the_code_is_given_as_its_eleven_characters():
    assert bottle_in(encoded(qr(grouped(CODE).lower()), "PNG")) == CODE


def test_two_labels_of_one_code_are_one():
    assert bottle_in(jpeg(photographed(CODE, CODE, pixels=300))) == CODE


def test_two_bottles_in_a_picture_are_not_guessed_at():
    with pytest.raises(NoCodeSeen) as raised:
        bottle_in(jpeg(photographed(CODE, OTHER, pixels=300)))
    assert raised.value.values == {"why": "several", "count": 2}


def test_another_code_beside_the_bottles_own_does_no_harm():
    assert bottle_in(jpeg(photographed(CODE, "SHELF 7", pixels=300))) == CODE


def test_a_code_of_something_else_is_said():
    with pytest.raises(NoCodeSeen) as raised:
        bottle_in(jpeg(photographed("SHELF 7")))
    assert raised.value.values == {"why": "other", "text": "SHELF 7"}


def test_a_bottle_code_whose_check_fails_is_no_bottle():
    with pytest.raises(NoCodeSeen) as raised:
        bottle_in(jpeg(photographed(CODE[:-1] + "X")))
    assert raised.value.values["why"] == "other"


@pytest.mark.parametrize("picture", [marked(), Image.new("L", (1, 1)), Image.new("L", (3, 9000))])
def test_a_picture_without_a_code_says_so(picture):
    with pytest.raises(NoCodeSeen) as raised:
        bottle_in(jpeg(picture))
    assert raised.value.values == {}


def test_codes_of_other_kinds_are_not_looked_for():
    import zxingcpp

    made = zxingcpp.create_barcode(CODE, zxingcpp.BarcodeFormat.Code128)
    stripes = Image.fromarray(zxingcpp.write_barcode_to_image(made, scale=4))
    assert zxingcpp.read_barcodes(stripes), "the control: it is a code"
    assert texts_in(encoded(stripes, "PNG")) == []


@pytest.mark.parametrize(
    ("data", "why"),
    [(b"", "empty"), (b"a text", "no-picture"), (bomb(), "too-many-pixels"),
     (jpeg(photographed(CODE))[:4000], "damaged")],
)  # fmt: skip
def test_what_is_no_picture_is_refused(data, why):
    with pytest.raises(BadPicture) as raised:
        texts_in(data)
    assert raised.value.values["why"] == why
