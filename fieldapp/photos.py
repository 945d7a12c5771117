"""Photos and documents as this node keeps them: upright, sized, without what a camera wrote in.

A picture is read here, turned upright, made small enough and written anew as a JPEG that holds
nothing but the picture: no place, no time, no serial number. It is on disk under its hash before
any entry may name it (sync.md B3).
"""

import contextlib
import errno
import io
import shutil
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from fieldapp.domain.errors import RuleBroken
from sync.shelf import FOLDER, Shelf, is_name

if TYPE_CHECKING:
    from PIL import Image

JPEG, PDF = "image/jpeg", "application/pdf"
MOST_BYTES = 16_000_000
"""Of one picture or document as it comes, in bytes. Our choice."""
MOST_PIXELS = 64_000_000
"""Of one picture. A camera makes fewer; a file that claims more would fill the memory."""
LONGEST_SIDE = 2000
"""Pixels of the longer side as kept: a label across a third of the picture can still be read."""
QUALITY = 85
SMALL_SIDE = 320
"""Pixels of the longer side of a thumbnail."""
ROOM = 200_000_000
"""Bytes that stay free for entries; below that no photo is taken. Source: sync.md B4."""

_MAGIC = {"JPEG": (b"\xff\xd8\xff",), "PNG": (b"\x89PNG\r\n\x1a\n",)}
_HEIC = (b"heic", b"heix", b"hevc", b"hevx", b"heim", b"heis", b"mif1", b"msf1")


class BadPicture(RuleBroken):
    """What came cannot be kept as a picture; ``why`` says what is wrong with it.

    ``empty``, ``too-large`` (``most_mb``), ``no-picture``, ``heic``, ``too-many-pixels``
    (``most_mp``) or ``damaged``.
    """

    kind = "bad-picture"


class NoRoom(RuleBroken):
    """The disk has too little room left for photos; entries still go on."""

    kind = "no-room"


@dataclass(frozen=True)
class Kept:
    """A file on this node's disk: its name, its bytes, its media type."""

    sha256: str
    n: int
    media: str


def keep(data: bytes, folder: Path) -> Kept:
    """Keep a picture in a node's data folder, upright, sized and stripped.

    Raises:
        BadPicture: It is none that can be read here; nothing was kept.
        NoRoom: The disk has no room for it; nothing was kept.
    """
    return _put(upright(data), JPEG, folder)


def keep_document(data: bytes, folder: Path) -> Kept:
    """Keep a document: a PDF byte for byte as it came, anything else as a picture.

    Raises:
        BadPicture: It is neither.
        NoRoom: The disk has no room for it.
    """
    if not data.startswith(b"%PDF-"):
        return keep(data, folder)
    _check_size(data)
    return _put(data, PDF, folder)


def find(sha256: str, folder: Path) -> Path | None:
    """Return the file of that hash, or None where this node does not hold it."""
    shelf = Shelf(folder / FOLDER)
    return shelf.path(sha256) if is_name(sha256) and shelf.has(sha256) else None


def small(sha256: str, folder: Path) -> bytes | None:
    """Return a kept picture at the size of a list, or None where there is none to show.

    It is made once and lies in the cache, which is no part of the record.
    """
    path = find(sha256, folder)
    if path is None:
        return None
    kept = folder / "cache" / f"{sha256}.jpg"
    with contextlib.suppress(OSError):
        return kept.read_bytes()
    try:
        made = _written(_read(path.read_bytes(), SMALL_SIDE), SMALL_SIDE)
    except BadPicture:
        return None
    with contextlib.suppress(OSError):  # a cache that cannot be written costs time and no more
        kept.parent.mkdir(exist_ok=True)
        half = kept.with_suffix(".new")
        half.write_bytes(made)
        half.replace(kept)
    return made


def upright(data: bytes) -> bytes:
    """Return a picture as a JPEG that holds nothing but the picture.

    Raises:
        BadPicture: It is none that can be read here.
    """
    _check_size(data)
    return _written(_read(data, LONGEST_SIDE), LONGEST_SIDE)


def opened(data: bytes) -> "Image.Image":
    """Return a picture of a size that is safe to read, not read yet.

    Raises:
        BadPicture: No JPEG, PNG or WebP, or more pixels than any camera makes.
    """
    from PIL import Image, UnidentifiedImageError

    _check_kind(data)
    try:
        image = Image.open(io.BytesIO(data), formats=("JPEG", "PNG", "WEBP"))
    except (Image.DecompressionBombError, Image.DecompressionBombWarning) as fault:
        raise _too_many_pixels() from fault
    except (UnidentifiedImageError, OSError, SyntaxError, ValueError, EOFError) as fault:
        raise BadPicture(why="damaged") from fault
    if image.width * image.height > MOST_PIXELS:
        raise _too_many_pixels()
    return image


def _too_many_pixels() -> BadPicture:
    return BadPicture(why="too-many-pixels", most_mp=MOST_PIXELS // 1_000_000)


def _read(data: bytes, side: int) -> "Image.Image":
    """Return the picture upright, in plain colours, with nothing of what came with it."""
    from PIL import Image, ImageOps

    image = opened(data)
    try:
        image.draft("RGB", (side, side))  # a large JPEG is read at a fraction of its size
        turned = ImageOps.exif_transpose(image)
        whole = turned.convert("RGBA" if _see_through(turned) else "RGB")
    except Exception as fault:
        # whatever a damaged file makes the decoder raise, it is the file's
        raise BadPicture(why="damaged") from fault
    # A fresh canvas: text, profiles and places hang on the picture that was opened.
    plain = Image.new("RGB", whole.size, "white")
    plain.paste(whole, mask=whole.getchannel("A") if whole.mode == "RGBA" else None)
    return plain


def _see_through(image: "Image.Image") -> bool:
    return image.mode in ("RGBA", "LA", "PA", "RGBa", "La") or "transparency" in image.info


def _written(image: "Image.Image", side: int) -> bytes:
    image.thumbnail((side, side))
    out = io.BytesIO()
    image.save(out, "JPEG", quality=QUALITY, optimize=True)
    return out.getvalue()


def _check_size(data: bytes) -> None:
    if not data:
        raise BadPicture(why="empty")
    if len(data) > MOST_BYTES:
        raise BadPicture(why="too-large", most_mb=MOST_BYTES // 1_000_000)


def _check_kind(data: bytes) -> None:
    """Look at the first bytes before anything else does (ASVS 5.2.2)."""
    webp = data[:4] == b"RIFF" and data[8:12] == b"WEBP"
    if webp or any(data.startswith(start) for starts in _MAGIC.values() for start in starts):
        return
    if data[4:8] == b"ftyp" and data[8:12] in _HEIC:
        raise BadPicture(why="heic")
    raise BadPicture(why="no-picture" if data else "empty")


def _put(data: bytes, media: str, folder: Path) -> Kept:
    if shutil.disk_usage(folder).free < ROOM + len(data):
        raise NoRoom()
    try:
        name = Shelf(folder / FOLDER).keep(data)
    except OSError as fault:
        if fault.errno in (errno.ENOSPC, errno.EDQUOT):
            raise NoRoom() from fault
        raise
    return Kept(name, len(data), media)
