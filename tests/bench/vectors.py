"""The vectors in a PDF of labels, read back from its pages and drawn again without a decision."""

import base64
import re
import zlib
from collections.abc import Iterator
from typing import BinaryIO

from reportlab.pdfgen.canvas import Canvas

from fieldapp.printing.label_face import BOLD, PLAIN
from fieldapp.printing.labels import DEFAULT_SHEET
from fieldapp.printing.sheets import POINTS_A_MM

Operand = float | str
Vector = tuple[str, tuple[Operand, ...]]
Page = list[Vector]
Call = tuple[str, tuple]

# Every page begins with what the canvas itself writes there: its transform and its first font.
PREAMBLE = ["cm", "BT", "Tf", "TL", "ET"]

FONTS = {"/F1": PLAIN, "/F2": BOLD}
SEGMENTS = {"re": "rect", "m": "moveTo", "l": "lineTo"}
PLAINLY = {"q": "saveState", "Q": "restoreState", "cm": "transform", "w": "setLineWidth"}
# A canvas writes these by itself, around the text and after its font.
BY_ITSELF = {"BT", "ET", "TL", "T*"}

# A PDF holds numbers to about six digits; so small a difference is in the last of them.
ROUNDING_POINTS = 1e-3


def read_pages(pdf: bytes) -> list[Page]:
    """Return what is drawn on each page: operators with their operands, in order."""
    packed = re.findall(rb"stream\r?\n(.*?)endstream", pdf, re.DOTALL)
    plain = [zlib.decompress(base64.a85decode(b"<~" + one.strip(), adobe=True)) for one in packed]
    return [_page(stream.decode("latin-1")) for stream in plain]


def _page(stream: str) -> Page:
    read: Page = []
    operands: list[Operand] = []
    for token in re.findall(r"\((?:\\.|[^\\)])*\)|\S+", stream):
        if token[0] in "(/":
            operands.append(token)
        elif token[0] in "-.0123456789":
            operands.append(float(token))
        else:
            read.append((token, tuple(operands)))
            operands = []
    begins = [operator for operator, _ in read[: len(PREAMBLE)]]
    assert begins == PREAMBLE, begins
    return read[len(PREAMBLE) :]


def require_same(ours: list[Page], again: list[Page]) -> None:
    """Stop where the second drawing is not the first, vector by vector."""
    assert [len(page) for page in ours] == [len(page) for page in again]
    for page, other in zip(ours, again, strict=True):
        for vector, drawn in zip(page, other, strict=True):
            assert _near(vector, drawn), (vector, drawn)


def _near(vector: Vector, drawn: Vector) -> bool:
    return vector[0] == drawn[0] and all(
        abs(a - b) < ROUNDING_POINTS if isinstance(a, float) and isinstance(b, float) else a == b
        for a, b in zip(vector[1], drawn[1], strict=True)
    )


def calls(page: Page) -> Iterator[Call]:
    """Yield the canvas's calls that draw those vectors: name and arguments."""
    segments: list[Call] = []
    at: tuple[Operand, ...] = ()
    for operator, operands in page:
        if operator in SEGMENTS:
            segments.append((SEGMENTS[operator], operands))
        elif operator in PLAINLY:
            yield PLAINLY[operator], operands
        elif operator in ("S", "f*"):
            yield "drawPath", (tuple(segments), int(operator == "S"), int(operator == "f*"))
        elif operator == "n":
            segments = []
        elif operator == "Tf":
            yield "setFont", (FONTS[str(operands[0])], operands[1])
        elif operator == "Tm":
            at = operands[4:]
        elif operator == "Tj":
            yield "drawString", (*at, _text(str(operands[0])))
        else:
            assert operator in BY_ITSELF, operator


def _text(literal: str) -> str:
    """Return the text of a PDF string: octal escapes and escaped brackets undone."""
    octal = re.sub(r"\\([0-7]{3})", lambda found: chr(int(found[1], 8)), literal[1:-1])
    return re.sub(r"\\([()\\])", r"\1", octal).encode("latin-1").decode("cp1252")


def draw_by_calls(pages: list[list[Call]], out: BinaryIO) -> None:
    """Draw by the canvas's own calls."""
    canvas = _canvas(out)
    for page in pages:
        for name, arguments in page:
            if name == "drawPath":
                segments, stroke, fill = arguments
                path = canvas.beginPath()
                for segment, numbers in segments:
                    getattr(path, segment)(*numbers)
                canvas.drawPath(path, stroke=stroke, fill=fill)
            else:
                getattr(canvas, name)(*arguments)
        canvas.showPage()
    canvas.save()


def draw_as_text(pages: list[Page], out: BinaryIO) -> None:
    """Write each vector straight into its page's content, past the canvas's calls."""
    canvas = _canvas(out)
    for page in pages:
        # Two fonts are named once, as the calls would name them: a page lists what it uses.
        for font in FONTS.values():
            canvas._doc.getInternalFontName(font)
        canvas._code.append(" ".join(map(_written, page)))
        canvas.showPage()
    canvas.save()


def _written(vector: Vector) -> str:
    operator, operands = vector
    said = [one if isinstance(one, str) else f"{one:.7g}" for one in operands]
    return " ".join([*said, operator])


def _canvas(out: BinaryIO) -> Canvas:
    width, height = (side * POINTS_A_MM for side in DEFAULT_SHEET.page_mm)
    return Canvas(out, pagesize=(width, height), invariant=1)
