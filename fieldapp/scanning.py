"""Codes read from pictures, on the node: a browser on most machines cannot (design 6)."""

from fieldapp.domain.codes import BadCode, normalise
from fieldapp.domain.errors import RuleBroken
from fieldapp.photos import BadPicture, opened

LONGEST_SIDE = 2000
"""Pixels to which a larger picture is made smaller before it is searched."""
MEDIAN = 3
"""Side of the filter before the second try, in pixels: it clears the grain of poor light."""


class NoCodeSeen(RuleBroken):
    """No bottle code was read; ``why``: ``several`` (``count``), ``other`` (``text``), none."""

    kind = "no-code-seen"


def texts_in(data: bytes) -> list[str]:
    """Return the text of every QR code in a picture, each once; none found is an empty list.

    Raises:
        BadPicture: It is no picture that can be read here.
    """
    import zxingcpp
    from PIL import ImageFilter, ImageOps

    image = opened(data)
    try:
        image.draft("L", (LONGEST_SIDE, LONGEST_SIDE))
        grey = ImageOps.exif_transpose(image).convert("L")
        grey.thumbnail((LONGEST_SIDE, LONGEST_SIDE))
    except Exception as fault:
        # whatever a damaged file makes the decoder raise, it is the file's
        raise BadPicture(why="damaged") from fault
    for tried in (grey, grey.filter(ImageFilter.MedianFilter(MEDIAN))):
        # all formats at once take ten times as long, and a label carries one
        found = zxingcpp.read_barcodes(tried, formats=zxingcpp.BarcodeFormat.QRCode)
        if found:
            return list(dict.fromkeys(one.text for one in found))
    return []


def bottle_in(data: bytes) -> str:
    """Return the one bottle code in a picture.

    Raises:
        BadPicture: It is no picture that can be read here.
        NoCodeSeen: None was read, or more than one.
    """
    texts = texts_in(data)
    codes = list(dict.fromkeys(code for text in texts if (code := _code(text))))
    if len(codes) == 1:
        return codes[0]
    if codes:
        raise NoCodeSeen(why="several", count=len(codes))
    if texts:
        raise NoCodeSeen(why="other", text=texts[0][:40])
    raise NoCodeSeen()


def _code(text: str) -> str:
    try:
        return normalise(text)
    except BadCode:
        return ""
