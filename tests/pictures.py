"""Pictures made by Pillow: what a camera would bring, and what nobody should send."""

import io
import random
import zlib

import qrcode
from PIL import Image, ImageDraw, ImageFilter

ORIENTATION, GPS, MAKE, TAKEN = 0x0112, 0x8825, 0x010F, 0x9003
PLACE = {1: "N", 2: (43.0, 36.0, 51.9), 3: "W", 4: (116.0, 12.0, 18.3)}
"""A place in degrees, minutes and seconds, as a camera writes it."""
HEIC = b"\0\0\0\x18ftypheic\0\0\0\0mif1heic" + b"\0" * 200
"""The first bytes of a picture as some cameras write it."""


def marked(width: int = 600, height: int = 400) -> Image.Image:
    """Return a picture that shows which way is up: red above left, the rest blue."""
    image = Image.new("RGB", (width, height), "navy")
    ImageDraw.Draw(image).rectangle((0, 0, width // 3, height // 3), fill="red")
    return image


def jpeg(image: Image.Image, **given: object) -> bytes:
    """Return a picture as JPEG bytes."""
    out = io.BytesIO()
    image.convert("RGB").save(out, "JPEG", quality=given.pop("quality", 90), **given)
    return out.getvalue()


def noisy(side: int, seed: int = 1) -> bytes:
    """Return a square JPEG that packs badly, as a photo of a cluttered sink does."""
    grain = random.Random(seed).randbytes(side * side)
    return jpeg(Image.frombytes("L", (side, side), grain))


def encoded(image: Image.Image, form: str) -> bytes:
    """Return a picture's bytes in that form."""
    out = io.BytesIO()
    image.save(out, form)
    return out.getvalue()


def from_camera(orientation: int = 1, image: Image.Image | None = None) -> bytes:
    """Return a JPEG with what cameras write beside the picture: place, maker, time, comment."""
    exif = Image.Exif()
    exif[ORIENTATION] = orientation
    exif[MAKE] = "Obscura Works"
    exif.get_ifd(GPS).update(PLACE)
    exif.get_ifd(0x8769)[TAKEN] = "2027:05:04 06:10:00"
    return jpeg(image or marked(), exif=exif, comment=b"at the blue house")


def bomb(side: int = 30_000) -> bytes:
    """Return a PNG of a few bytes that claims a very large picture."""
    small = encoded(Image.new("1", (8, 8)), "PNG")
    head = b"IHDR" + side.to_bytes(4) + side.to_bytes(4) + bytes([1, 0, 0, 0, 0])
    return small[:12] + head + zlib.crc32(head).to_bytes(4) + small[33:]


def qr(text: str, pixels: int = 360) -> Image.Image:
    """Return a QR code with its quiet zone, of about that width."""
    made = qrcode.QRCode(error_correction=qrcode.constants.ERROR_CORRECT_M, border=4)
    made.add_data(text)
    return made.make_image().convert("L").resize((pixels, pixels), Image.Resampling.NEAREST)


def photographed(
    *texts: str,
    pixels: int = 360,
    turn: float = 0.0,
    tilt: float = 0.0,
    blur: float = 0.0,
    noise: float = 0.0,
    seed: int = 1,
) -> Image.Image:
    """Return a table with labels on it as a hand-held camera sees it, 1280 by 960.

    Args:
        texts: What each QR code says.
        pixels: How wide a code is with its quiet zone.
        turn: Degrees by which the camera is turned.
        tilt: Share by which the far side is narrower.
        blur: Radius in pixels.
        noise: Standard deviation of the grain, of 255.
        seed: Of the grain, so that a picture can be made again.
    """
    table = Image.new("L", (1280, 960), 150)
    for place, text in enumerate(texts):
        table.paste(qr(text, pixels), (640 - pixels // 2 + (place - len(texts) // 2) * 500, 300))
    seen = table.rotate(turn, Image.Resampling.BICUBIC, fillcolor=150)
    if tilt:
        narrow = 1280 * tilt / 2
        corners = (narrow, 0, 0, 960, 1280, 960, 1280 - narrow, 0)
        seen = seen.transform(seen.size, Image.Transform.QUAD, corners, Image.Resampling.BICUBIC)
    if blur:
        seen = seen.filter(ImageFilter.GaussianBlur(blur))
    return _grained(seen, noise, seed) if noise else seen


def _grained(image: Image.Image, deviation: float, seed: int) -> Image.Image:
    chance = random.Random(seed)
    grain = bytes(
        max(0, min(255, round(value + chance.gauss(0, deviation)))) for value in image.tobytes()
    )
    return Image.frombytes("L", image.size, grain)
