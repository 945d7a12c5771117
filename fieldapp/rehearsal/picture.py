"""The pictures of a rehearsal: invented ones, each another, as large as a camera's small ones."""

import hashlib
import io

WIDTH, HEIGHT = 640, 480
STRIPES = 16


def picture_of(what: str) -> bytes:
    """Return a JPEG whose stripes are told by the text; another text gives another picture."""
    from PIL import Image, ImageDraw

    image = Image.new("RGB", (WIDTH, HEIGHT), "white")
    draw = ImageDraw.Draw(image)
    digest = hashlib.sha256(what.encode()).digest()
    for n, byte in enumerate(digest[:STRIPES]):
        left = n * WIDTH // STRIPES
        top = HEIGHT - HEIGHT * (byte + 1) // 257
        draw.rectangle((left, top, left + WIDTH // STRIPES, HEIGHT), fill=(byte, 96, 140))
    out = io.BytesIO()
    image.save(out, "JPEG", quality=80)
    return out.getvalue()
