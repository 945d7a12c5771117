"""The face of one label: a QR, a code to read aloud, a few lines, ruled space for a pen.

All lengths are points (1/72 inch), measured from the label's lower left corner. Black only, for
thermal paper. Whatever the words, nothing leaves the label: text grows or shrinks as one, then
the least needed rows go, then shorter wordings are taken, and at the very last a line is cut with
an ellipsis. The code is never cut.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

from fieldapp.printing import qr
from fieldapp.printing.sheets import POINTS_A_MM

if TYPE_CHECKING:
    from reportlab.pdfgen.canvas import Canvas

PLAIN, BOLD = "Helvetica", "Helvetica-Bold"

# Printers feed a little askew; text keeps this far from the edge. The QR has its quiet zone.
PADDING = 1.4 * POINTS_A_MM

# The symbol itself is 14 mm wide on labels from 48 mm on; a smaller label keeps 14 mm with the
# quiet zone, or no room for a pen is left beside it.
QR_WIDE_LABEL = 48 * POINTS_A_MM
QR_LEAST = 14.5 * POINTS_A_MM
QR_LEAST_WIDE = 14.1 * POINTS_A_MM * qr.OUTER_MODULES / qr.SIDE_MODULES
QR_MOST = 32 * POINTS_A_MM
QR_SHARE = 0.35

CODE_SIZE, CAPTION_SIZE, CAPTION_LEAST = 15.0, 5.0, 4.2
LEADING, ASCENT = 1.16, 0.93
PEN_WANTED, PEN_LEAST, PEN_TIGHT, PEN_MOST = 14.0, 8.0, 5.0, 30.0
PEN_GAP = 4.0
LINE_WIDTH = 0.4
# Keeps the stroke of a ruled line out of the quiet zone.
HAIR = 1.0

GROWN = (1.8, 1.6, 1.4, 1.25, 1.1)
SHRUNK = (1.0, 0.92, 0.85)
LAST_RESORT = (0.85, 0.75, 0.66)
SLIGHTLY_SMALLER = (1.0, 0.94, 0.88)


@dataclass(frozen=True)
class Row:
    """One thing to say: its wordings from the fullest to the shortest, and its size in points.

    ``below`` rows stand under the pen's lines, the others above them. A row that ``may_be_cut``
    loses its end before any other is shortened beyond its wordings.
    """

    wordings: tuple[str, ...]
    size: float
    font: str = PLAIN
    below: bool = False
    may_be_cut: bool = False


@dataclass(frozen=True)
class Face:
    """What a label says. Of ``optional`` rows the last goes first where room is short.

    ``notes`` go after all of these, at the very last. ``pens`` are the captions of the ruled
    lines, row by row.
    """

    code: str
    grouped: str
    rows: tuple[Row, ...]
    notes: tuple[Row, ...]
    optional: tuple[Row, ...]
    pens: tuple[tuple[str, ...], ...]


@dataclass(frozen=True)
class Line:
    """A line of text as it will stand, with its size in points."""

    text: str
    font: str
    size: float

    @property
    def height(self) -> float:
        return self.size * LEADING

    @property
    def width(self) -> float:
        return _text_width(self.text, self.font, self.size)


@dataclass(frozen=True)
class Attempt:
    """How a face is tried: its scale, which rows stay, how a row may be broken or shortened."""

    scale: float
    kept: int
    most_lines: int
    least_pen: float = PEN_WANTED
    shorten: bool = False
    cut: bool = False
    notes: bool = True


@dataclass(frozen=True)
class Arrangement:
    """Lines above, pen rows of one height, lines below: what fits a column."""

    above: tuple[Line, ...]
    pen_height: float
    caption_size: float
    below: tuple[Line, ...]


def draw_face(canvas: "Canvas", face: Face, width: float, height: float) -> None:
    """Draw the label with its lower left corner at the canvas's present origin."""
    side, column = _split(width, height)
    _draw_qr(canvas, face.code, *_qr_corner(side, width, height), side)
    left, bottom, room, tall = column
    _draw_column(canvas, face, _arrange(face, room, tall), left, bottom, room, tall)


def _split(width: float, height: float) -> tuple[float, tuple[float, float, float, float]]:
    """Return the side of the QR with quiet zone, and the column of text beside or below it."""
    least = QR_LEAST_WIDE if width >= QR_WIDE_LABEL else QR_LEAST
    if _is_upright(width, height):
        side = min(max(least, 0.4 * height), width, QR_MOST)
        return side, (PADDING, PADDING, width - 2 * PADDING, height - side - PADDING)
    side = min(max(least, QR_SHARE * width), height, QR_MOST)
    left = side + HAIR
    return side, (left, PADDING, width - left - PADDING, height - 2 * PADDING)


def _is_upright(width: float, height: float) -> bool:
    return height >= 1.2 * width


def _qr_corner(side: float, width: float, height: float) -> tuple[float, float]:
    return (0.0, height - side) if _is_upright(width, height) else (0.0, (height - side) / 2)


def _draw_qr(canvas: "Canvas", code: str, left: float, bottom: float, side: float) -> None:
    # One path of whole-number rectangles: no seams between modules, and a small file.
    canvas.saveState()
    canvas.translate(left, bottom)
    canvas.scale(side / qr.OUTER_MODULES, side / qr.OUTER_MODULES)
    path = canvas.beginPath()
    for column, row, length in qr.dark_runs(code):
        path.rect(column, row, length, 1)
    canvas.drawPath(path, stroke=0, fill=1)
    canvas.restoreState()


def _arrange(face: Face, width: float, height: float) -> Arrangement:
    """Return the largest arrangement of the face that fits a column of that size."""
    for attempt in _attempts(len(face.optional)):
        found = _fit(face, width, height, attempt)
        if found:
            return found
    raise AssertionError(f"a label column of {width:.0f} x {height:.0f} points holds nothing")


def _attempts(optional: int) -> Iterator[Attempt]:
    for scale in GROWN:
        yield Attempt(scale, optional, most_lines=1)
    for kept in range(optional, -1, -1):
        for scale in SHRUNK:
            yield Attempt(scale, kept, most_lines=2)
    last = partial(Attempt, kept=0, least_pen=PEN_LEAST, shorten=True)
    for most_lines in (2, 1):
        for scale in LAST_RESORT:
            yield last(scale, most_lines=most_lines)
    for notes, least_pen in ((True, PEN_LEAST), (False, PEN_LEAST), (False, PEN_TIGHT)):
        yield last(LAST_RESORT[-1], most_lines=1, least_pen=least_pen, notes=notes, cut=True)


def _fit(face: Face, width: float, height: float, attempt: Attempt) -> Arrangement | None:
    rows = face.rows + face.notes * attempt.notes + face.optional[: attempt.kept]
    above = _set_rows([row for row in rows if not row.below], width, attempt)
    below = _set_rows([row for row in rows if row.below], width, attempt)
    if above is None or below is None:
        return None
    above = [_code_line(face.grouped, width, attempt.scale), *above]
    caption = max(CAPTION_LEAST, CAPTION_SIZE * attempt.scale)
    used = sum(line.height for line in above + below) + len(face.pens) * caption * LEADING
    pen_height = (height - used) / len(face.pens)
    if pen_height < attempt.least_pen * max(1.0, attempt.scale):
        return None
    return Arrangement(tuple(above), min(pen_height, PEN_MOST), caption, tuple(below))


def _code_line(grouped: str, width: float, scale: float) -> Line:
    widest = width / _text_width(grouped, BOLD, 1.0)
    return Line(grouped, BOLD, min(CODE_SIZE * scale, widest))


def _set_rows(rows: Sequence[Row], width: float, attempt: Attempt) -> list[Line] | None:
    lines: list[Line] = []
    for row in rows:
        of_row = _set_row(row, width, attempt)
        if of_row is None:
            return None
        lines.extend(of_row)
    return lines


def _set_row(row: Row, width: float, attempt: Attempt) -> list[Line] | None:
    """Return the lines of a row, or none where no wording that may be taken fits."""
    size = row.size * attempt.scale
    for wording in row.wordings if attempt.shorten else row.wordings[:1]:
        lines = _set_wording(wording, row.font, size, width)
        if len(lines) <= attempt.most_lines and all(line.width <= width for line in lines):
            return lines
    if not (attempt.cut or (attempt.shorten and row.may_be_cut)):
        return None
    return [Line(_elided(row.wordings[-1], row.font, size, width), row.font, size)]


def _set_wording(wording: str, font: str, size: float, width: float) -> list[Line]:
    """Return the wording on one line if a little smaller will do, else broken."""
    for slightly in SLIGHTLY_SMALLER:
        line = Line(wording, font, size * slightly)
        if line.width <= width:
            return [line]
    return [Line(text, font, size) for text in _broken(wording, font, size, width)]


def _broken(text: str, font: str, size: float, width: float) -> list[str]:
    """Return the text broken at plain spaces; a no-break space holds a number to its unit."""
    lines: list[str] = []
    for word in text.split(" "):
        longer = f"{lines[-1]} {word}" if lines else word
        if lines and _text_width(longer, font, size) <= width:
            lines[-1] = longer
        else:
            lines.append(word)
    # A dot that parts two things says nothing at the end or the beginning of a line.
    return [line.removesuffix(" ·").removeprefix("· ") for line in lines if line != "·"]


def _elided(text: str, font: str, size: float, width: float) -> str:
    """Return the text cut to the width; what stands after the last dot is kept, if it can be."""
    if _text_width(text, font, size) <= width:
        return text
    head, dot, end = text.rpartition(" · ")
    room = width - _text_width(dot + end, font, size)
    if not head or room < width / 4:
        head, dot, end, room = text, "", "", width
    while head and _text_width(head + "…", font, size) > room:
        head = head[:-1]
    return head.rstrip(" ·,") + "…" + dot + end


def _text_width(text: str, font: str, size: float) -> float:
    from reportlab.pdfbase.pdfmetrics import stringWidth

    return float(stringWidth(text, font, size))


def _draw_column(
    canvas: "Canvas",
    face: Face,
    arrangement: Arrangement,
    left: float,
    bottom: float,
    width: float,
    height: float,
) -> None:
    top = bottom + height
    for line in arrangement.above:
        _draw_line(canvas, line, left, top)
        top -= line.height
    row_height = arrangement.pen_height + arrangement.caption_size * LEADING
    top = bottom + sum(line.height for line in arrangement.below) + row_height * len(face.pens)
    for captions in face.pens:
        top -= arrangement.pen_height
        _draw_pens(canvas, captions, arrangement.caption_size, left, top, width)
        top -= arrangement.caption_size * LEADING
    for line in arrangement.below:
        _draw_line(canvas, line, left, top)
        top -= line.height


def _draw_line(canvas: "Canvas", line: Line, left: float, top: float) -> None:
    canvas.setFont(line.font, line.size)
    canvas.drawString(left, top - ASCENT * line.size, line.text)


def _draw_pens(
    canvas: "Canvas", captions: tuple[str, ...], size: float, left: float, top: float, width: float
) -> None:
    """Rule one line a caption, the first half as wide again, with the caption below it."""
    shares = [1.5] + [1.0] * (len(captions) - 1)
    room = width - PEN_GAP * (len(captions) - 1)
    canvas.setLineWidth(LINE_WIDTH)
    for caption, share in zip(captions, shares, strict=True):
        length = room * share / sum(shares)
        canvas.line(left, top - LINE_WIDTH, left + length, top - LINE_WIDTH)
        text = _elided(caption, PLAIN, size, length)
        _draw_line(canvas, Line(text, PLAIN, size), left, top - LINE_WIDTH)
        left += length + PEN_GAP
