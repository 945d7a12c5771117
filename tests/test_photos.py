"""Photos as kept: upright, sized, without a word of what the camera wrote; nothing else gets in."""

import errno
import hashlib
import io
import os
from pathlib import Path

import pytest
from PIL import Image

from fieldapp import photos
from fieldapp.photos import BadPicture, NoRoom
from sync.shelf import Shelf

from .pictures import GPS, HEIC, bomb, encoded, from_camera, jpeg, marked

RED = (254, 0, 0)


def kept(data: bytes, folder: Path) -> Image.Image:
    """Keep a picture and return it as it lies on the disk."""
    found = photos.keep(data, folder)
    path = photos.find(found.sha256, folder)
    assert path is not None
    assert hashlib.sha256(path.read_bytes()).hexdigest() == found.sha256
    assert path.stat().st_size == found.n
    return Image.open(io.BytesIO(path.read_bytes()))


def near(one: tuple[int, ...], other: tuple[int, ...]) -> bool:
    return all(abs(a - b) < 30 for a, b in zip(one, other, strict=True))


@pytest.mark.parametrize("orientation", range(1, 9))
def test_a_photo_is_turned_upright(orientation, tmp_path):
    # what the camera's sensor wrote, so that turned as it says it shows red above left
    turns = {
        2: Image.Transpose.FLIP_LEFT_RIGHT, 3: Image.Transpose.ROTATE_180,
        4: Image.Transpose.FLIP_TOP_BOTTOM, 5: Image.Transpose.TRANSPOSE,
        6: Image.Transpose.ROTATE_90, 7: Image.Transpose.TRANSVERSE,
        8: Image.Transpose.ROTATE_270,
    }  # fmt: skip
    upright = marked()
    written = upright.transpose(turns[orientation]) if orientation in turns else upright
    data = from_camera(orientation, written)
    assert Image.open(io.BytesIO(data)).getexif()[0x0112] == orientation

    found = kept(data, tmp_path)

    assert found.size == (600, 400)
    assert near(found.getpixel((20, 20)), RED)
    assert not near(found.getpixel((580, 380)), RED)


def test_nothing_that_a_camera_wrote_beside_the_picture_is_kept(tmp_path):
    data = from_camera()
    control = Image.open(io.BytesIO(data))
    assert control.getexif().get_ifd(GPS)[4] == (116.0, 12.0, 18.3)
    assert control.info["comment"] == b"at the blue house"
    assert b"Obscura" in data

    found = kept(data, tmp_path)

    assert dict(found.getexif()) == {}
    assert found.getexif().get_ifd(GPS) == {}
    assert set(found.info) <= {"jfif", "jfif_version", "jfif_unit", "jfif_density"}
    written = photos.find(photos.keep(data, tmp_path).sha256, tmp_path).read_bytes()
    for word in (b"Obscura", b"2027", b"blue house", b"Exif", b"ICC", b"http"):
        assert word not in written


def test_text_in_a_png_and_a_colour_profile_are_left_behind(tmp_path):
    from PIL import ImageCms, PngImagePlugin

    said = PngImagePlugin.PngInfo()
    said.add_text("Comment", "at the blue house")
    out = io.BytesIO()
    profile = ImageCms.ImageCmsProfile(ImageCms.createProfile("sRGB")).tobytes()
    marked().save(out, "PNG", pnginfo=said, icc_profile=profile)
    assert Image.open(io.BytesIO(out.getvalue())).info["Comment"]

    found = kept(out.getvalue(), tmp_path)

    assert not {"Comment", "icc_profile", "exif", "xmp"} & set(found.info)


def test_a_large_photo_is_made_smaller_and_a_small_one_is_not_made_larger(tmp_path):
    assert kept(jpeg(marked(4000, 3000)), tmp_path).size == (2000, 1500)
    assert kept(jpeg(marked(3000, 4000)), tmp_path).size == (1500, 2000)
    assert kept(jpeg(marked(640, 480)), tmp_path).size == (640, 480)


@pytest.mark.parametrize("form", ["JPEG", "PNG", "WEBP"])
def test_every_form_that_a_camera_of_today_writes_is_kept_as_jpeg(form, tmp_path):
    found = kept(encoded(marked(), form), tmp_path)
    assert found.format == "JPEG"
    assert near(found.getpixel((20, 20)), RED)


@pytest.mark.parametrize("mode", ["L", "1", "P", "LA", "RGBA", "CMYK", "I;16"])
def test_a_picture_in_any_colours_is_kept(mode, tmp_path):
    image = Image.new(mode, (60, 40)) if mode == "I;16" else marked(60, 40).convert(mode)
    form = "JPEG" if mode == "CMYK" else "PNG"
    assert kept(encoded(image, form), tmp_path).mode == "RGB"


def test_what_is_see_through_is_white_and_not_black(tmp_path):
    clear = Image.new("RGBA", (60, 40), (0, 0, 0, 0))
    assert near(kept(encoded(clear, "PNG"), tmp_path).getpixel((30, 20)), (255, 255, 255))


GIF = encoded(Image.new("P", (8, 8)), "GIF")
NO_PICTURES = {
    "nothing": (b"", "empty"),
    "text": (b"not a picture at all", "no-picture"),
    "a page": (b"<!doctype html><script>alert(1)</script>", "no-picture"),
    "a drawing": (b"<svg xmlns='http://www.w3.org/2000/svg'/>", "no-picture"),
    "a GIF": (GIF, "no-picture"),
    "a PDF": (b"%PDF-1.4\n", "no-picture"),
    "a HEIC": (HEIC, "heic"),
    "a bomb": (bomb(), "too-many-pixels"),
    "a smaller bomb": (bomb(9000), "too-many-pixels"),
    "the start of a JPEG": (b"\xff\xd8\xff\xe0" + b"\0" * 50, "damaged"),
    "half a JPEG": (jpeg(marked())[:900], "damaged"),
    "half a PNG": (encoded(marked(), "PNG")[:300], "damaged"),
    "a RIFF of sound": (b"RIFF\0\0\0\0WAVE" + b"\0" * 40, "no-picture"),
    "more than 16 MB": (b"\xff\xd8\xff" + b"\0" * 16_000_000, "too-large"),
}


@pytest.mark.parametrize("what", NO_PICTURES)
def test_what_is_no_picture_is_refused_and_nothing_is_kept(what, tmp_path):
    data, why = NO_PICTURES[what]
    with pytest.raises(BadPicture) as raised:
        photos.keep(data, tmp_path)
    assert raised.value.values["why"] == why
    assert list(tmp_path.rglob("*")) == []


def test_every_refusal_of_a_picture_has_its_own_sentence():
    from fieldapp import words

    for _, why in NO_PICTURES.values():
        assert f"bad-picture-{why}" in words.RULES


def test_the_bytes_and_their_place_are_on_disk_before_the_name_is_told(tmp_path, monkeypatch):
    done: list[str] = []
    replace, fsync = Path.replace, os.fsync
    monkeypatch.setattr(
        Path, "replace", lambda self, to: (done.append("place"), replace(self, to))[1]
    )
    monkeypatch.setattr("sync.shelf.os.fsync", lambda n: (done.append("disk"), fsync(n))[1])
    photos.keep(jpeg(marked()), tmp_path)
    # file, folder of folders (a new one), place, folder
    assert done == ["disk", "disk", "place", "disk"]


@pytest.mark.parametrize("step", ["write", "fsync", "replace"])
def test_a_keeping_that_fails_leaves_nothing_under_the_name(step, tmp_path, monkeypatch):
    def fail(*_: object, **__: object) -> None:
        raise OSError(errno.ENOSPC, "no space left")

    target = {
        "write": ("sync.shelf.hashlib.sha256", fail),
        "fsync": ("sync.shelf.os.fsync", fail),
        "replace": ("sync.shelf.Path.replace", fail),
    }[step]
    monkeypatch.setattr(*target)
    with pytest.raises(NoRoom):
        photos.keep(jpeg(marked()), tmp_path)
    assert [path for path in tmp_path.rglob("*") if path.is_file()] == []


def test_with_little_room_left_no_photo_is_taken(tmp_path, monkeypatch):
    class Usage:
        free = photos.ROOM

    monkeypatch.setattr("fieldapp.photos.shutil.disk_usage", lambda _: Usage)
    with pytest.raises(NoRoom):
        photos.keep(jpeg(marked()), tmp_path)
    assert list(tmp_path.rglob("*")) == []


def test_what_a_cut_off_node_had_begun_is_swept_and_whole_files_stay(tmp_path):
    found = photos.keep(jpeg(marked()), tmp_path)
    (tmp_path / "blobs" / "0123.new").write_bytes(b"half")
    Shelf(tmp_path / "blobs").sweep()
    assert [p.name for p in (tmp_path / "blobs").iterdir()] == [found.sha256[:2]]


def test_the_same_photo_twice_is_one_file(tmp_path):
    first, second = (photos.keep(from_camera(), tmp_path) for _ in range(2))
    assert first == second
    assert len(list((tmp_path / "blobs").rglob("*.*"))) == 0
    assert len([p for p in (tmp_path / "blobs").rglob("*") if p.is_file()]) == 1


def test_a_document_is_kept_byte_for_byte_and_a_picture_of_one_as_a_picture(tmp_path):
    paper = b"%PDF-1.4\n1 0 obj\n<<>>\nendobj\n%%EOF\n"
    found = photos.keep_document(paper, tmp_path)
    assert (found.media, found.n) == ("application/pdf", len(paper))
    assert photos.find(found.sha256, tmp_path).read_bytes() == paper
    assert photos.keep_document(from_camera(), tmp_path).media == "image/jpeg"
    with pytest.raises(BadPicture):
        photos.keep_document(b"PK\x03\x04", tmp_path)


@pytest.mark.parametrize("name", ["", "..", "../ledger.db", "a" * 63, "A" * 64, "g" * 64])
def test_no_path_is_made_of_what_is_no_hash(name, tmp_path):
    assert photos.find(name, tmp_path) is None
    with pytest.raises(ValueError, match="is no name"):
        Shelf(tmp_path).path(name)


def test_a_thumbnail_is_made_once_and_its_cache_may_be_lost(tmp_path):
    found = photos.keep(jpeg(marked(1200, 800)), tmp_path)
    made = photos.small(found.sha256, tmp_path)
    assert Image.open(io.BytesIO(made)).size == (320, 213)
    cached = tmp_path / "cache" / f"{found.sha256}.jpg"
    assert cached.read_bytes() == made
    cached.unlink()
    assert photos.small(found.sha256, tmp_path) == made
    assert photos.small("0" * 64, tmp_path) is None


def test_a_paper_has_no_thumbnail(tmp_path):
    found = photos.keep_document(b"%PDF-1.4\n", tmp_path)
    assert photos.small(found.sha256, tmp_path) is None
