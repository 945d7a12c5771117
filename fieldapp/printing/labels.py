"""Labels for bottles, on sheets or rolls, as PDF. They go on the bottle, never on the cap.

A label carries no name and no address: a site has its code. Times and initials are for a pen,
so a dead tablet does not end the day.
"""

import unicodedata
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, BinaryIO

from fieldapp.domain import codes
from fieldapp.printing.label_face import BOLD, Face, Row, draw_face
from fieldapp.printing.sheets import (
    DEFAULT_SHEET,
    POINTS_A_MM,
    BadSheet,
    CannotPrint,
    Roll,
    Sheet,
    parse_roll,
    parse_sheet,
)
from fieldapp.words import gettext as _
from fieldapp.words import ngettext

if TYPE_CHECKING:
    from reportlab.pdfgen.canvas import Canvas

__all__ = [
    "DEFAULT_SHEET",
    "BadLabel",
    "BadSheet",
    "CannotPrint",
    "Label",
    "Roll",
    "Sheet",
    "labels_pdf",
    "parse_roll",
    "parse_sheet",
    "printable",
]

Progress = Callable[[int, int], None]

# What the fonts that every PDF reader has can show.
_FONT_ENCODING = "cp1252"
_NO_BREAK = "\u00a0"
_THIN_SPACES = str.maketrans("\u2009\u202f\t\r\n", _NO_BREAK * 2 + "   ")

# How much of a site's code is shown where all of it finds no room, in characters.
SITE_LENGTHS = (24, 16, 10, 6, 2)

# Cutting marks stand this far from the outermost labels and are this long.
_MARK_GAP_MM, _MARK_MM = 1.0, 3.0


class BadLabel(CannotPrint):
    """A bottle cannot be put on a label, or there is none to put."""


@dataclass(frozen=True)
class Label:
    """What one label says; every text in the reader's language, none of it private.

    ``site`` is a site's code, empty for a spare; ``draw`` is 0 for none; ``draw_words`` reads
    like *Draw 1 · first litre*; ``preservative`` is ``none`` or ``acid``. ``note`` stands in
    place of *Do not rinse. Cold water only.*, for a blank or a bottle that is filled otherwise.
    """

    code: str
    site: str = ""
    draw: int = 0
    draw_words: str = ""
    volume_ml: int = 0
    analyse: tuple[str, ...] = ()
    preservative: str = "none"
    route: str = ""
    purpose_words: str = ""
    note: str = ""


def labels_pdf(
    labels: Sequence[Label],
    out: BinaryIO,
    *,
    sheet: Sheet | None = None,
    roll: Roll | None = None,
    progress: Progress | None = None,
) -> None:
    """Write one label a bottle, in the order given, as a PDF into ``out``.

    The same labels on the same paper give the same bytes. ``progress`` is told how many are
    drawn of how many. Nothing is written unless every label can be drawn.

    Raises:
        BadLabel: No labels, an unknown preservative, or a site code that cannot be printed.
        BadCode: A code that is no bottle code.
        BadSheet: Both a sheet and a roll are given.
    """
    from reportlab.pdfgen.canvas import Canvas

    if sheet and roll:
        raise BadSheet(_("Labels go on a sheet or on a roll. Name one of them."))
    paper = roll.as_sheet() if roll else sheet or DEFAULT_SHEET
    faces = [_face(label) for label in labels]
    if not faces:
        raise BadLabel(_("There is no bottle to print a label for."))
    width, height = (side * POINTS_A_MM for side in paper.page_mm)
    # invariant: no time of printing in the file, so a reprint can be compared with the first.
    canvas = Canvas(out, pagesize=(width, height), invariant=1)
    canvas.setTitle(_("Bottle labels"))
    canvas.setAuthor("")
    canvas.setCreator("Tapwitness")
    for number, face in enumerate(faces):
        _place(canvas, paper, number, face)
        if progress:
            progress(number + 1, len(faces))
    canvas.showPage()
    canvas.save()


def _place(canvas: "Canvas", paper: Sheet, number: int, face: Face) -> None:
    page, place = divmod(number, paper.labels_a_page)
    if place == 0:
        if page:
            canvas.showPage()
        if paper.marks:
            _draw_marks(canvas, paper)
    left, top = paper.corner_mm(place)
    canvas.saveState()
    bottom = paper.page_mm[1] - top - paper.label_height_mm
    canvas.translate(left * POINTS_A_MM, bottom * POINTS_A_MM)
    width, height = paper.label_width_mm * POINTS_A_MM, paper.label_height_mm * POINTS_A_MM
    draw_face(canvas, face, width, height)
    canvas.restoreState()


def _draw_marks(canvas: "Canvas", paper: Sheet) -> None:
    """Draw short lines in the margins, in line with every edge of a label."""
    page_height = paper.page_mm[1]
    corners = [paper.corner_mm(place) for place in range(paper.labels_a_page)]
    edges_x = {x + side for x, _y in corners for side in (0.0, paper.label_width_mm)}
    edges_y = {y + side for _x, y in corners for side in (0.0, paper.label_height_mm)}
    path = canvas.beginPath()
    for x in sorted(edges_x):
        for y, away in ((min(edges_y), -1), (max(edges_y), 1)):
            path.moveTo(*_point(x, y + away * _MARK_GAP_MM, page_height))
            path.lineTo(*_point(x, y + away * (_MARK_GAP_MM + _MARK_MM), page_height))
    for y in sorted(edges_y):
        for x, away in ((min(edges_x), -1), (max(edges_x), 1)):
            path.moveTo(*_point(x + away * _MARK_GAP_MM, y, page_height))
            path.lineTo(*_point(x + away * (_MARK_GAP_MM + _MARK_MM), y, page_height))
    canvas.setLineWidth(0.3)
    canvas.drawPath(path, stroke=1, fill=0)


def _point(x_mm: float, y_mm: float, page_height_mm: float) -> tuple[float, float]:
    return x_mm * POINTS_A_MM, (page_height_mm - y_mm) * POINTS_A_MM


def _face(label: Label) -> Face:
    """Return the words of a label, each in the order of how much it is needed."""
    code = codes.normalise(label.code)
    rows = [Row(_first_line(label), 8.0, BOLD), Row(tuple(_second_line(label)), 7.5)]
    if label.preservative == "acid":
        rows.append(Row(_caution(), 6.0, BOLD, below=True))
    note = printable(label.note)
    return Face(
        code=code,
        grouped=codes.grouped(code),
        rows=tuple(rows),
        notes=(Row((note,), 5.6, below=True, may_be_cut=True),) if note else (),
        optional=tuple(_optional(label)),
        pens=_pens(label),
    )


def _optional(label: Label) -> Iterator[Row]:
    if not label.note:
        yield Row((_care(label),), 5.6, below=True)
    aside = _joined(printable(label.purpose_words), _route(label))
    if aside:
        yield Row((aside,), 6.0)
    yield Row((printable(_("On the bottle, not on the cap.")),), 5.6, below=True)


def _caution() -> tuple[str, ...]:
    # A bottle is never rinsed; one with acid that ran over is discarded; what is in it is acid.
    # Source: laboratories' bottle instructions (read); that it burns: from memory, check.
    full = _("Acid inside, it burns. Do not rinse or overfill.")
    return printable(full), printable(_("Acid inside. Do not rinse."))


def _care(label: Label) -> str:
    if label.preservative == "acid":
        return printable(_("Cold water only."))
    return printable(_("Do not rinse. Cold water only."))


def _pens(label: Label) -> tuple[tuple[str, ...], ...]:
    when = tuple(printable(text) for text in (_("date"), _("time"), _("initials")))
    where = tuple(printable(text) for text in (_("site"), _("draw")))
    return (when,) if label.site else (where, when)


def _first_line(label: Label) -> tuple[str, ...]:
    volume = _volume(label.volume_ml)
    if not label.site:
        return (_joined(printable(_("Spare")), volume),)
    number = printable(_("Draw {number}").format(number=label.draw)) if label.draw else ""
    words = printable(label.draw_words) or number
    return _joined(words, volume), _joined(_bound(number or words), volume)


def _second_line(label: Label) -> Iterator[str]:
    """Yield site, analyses and preservative; then with fewer analyses; then with less of the site.

    The preservative is never left out.
    """
    site, end = _site(label), _preservative(label)
    names = [_bound(printable(name)) for name in label.analyse]
    if not names:
        names = [_bound(printable(_("not analysed")))] if site else [""]
    for count in range(len(names), 0, -1):
        yield _joined(_site_words(site), _counted(names, count), end)
    for length in SITE_LENGTHS:
        short = site[:length] + "…" if len(site) > length else site
        yield _joined(_site_words(short), _counted(names, 1), end)
    if not label.analyse:
        return
    many = ngettext("{count} analysis", "{count} analyses", len(names)).format(count=len(names))
    yield _joined(_site_words(short), _bound(printable(many)), end)


def _counted(names: list[str], count: int) -> str:
    more = f"{_NO_BREAK}+{len(names) - count}" if count < len(names) else ""
    return ", ".join(names[:count]) + more


def _site_words(site: str) -> str:
    return _bound(printable(_("Site {site}").format(site=site))) if site else ""


def _preservative(label: Label) -> str:
    known = {"none": _("no acid"), "acid": _("acid")}
    if label.preservative not in known:
        text = _("The preservative of bottle {code} is “{name}”. It may be none or acid.")
        raise BadLabel(text.format(code=label.code, name=label.preservative))
    return _bound(printable(known[label.preservative]))


def _site(label: Label) -> str:
    site = unicodedata.normalize("NFC", label.site)
    if printable(site) != site:
        text = _("The site code “{site}” has letters that a label cannot show. Use A to Z and 0-9.")
        raise BadLabel(text.format(site=label.site))
    return site


def _route(label: Label) -> str:
    return printable(_("Route {route}").format(route=label.route)) if label.route else ""


def _volume(volume_ml: int) -> str:
    return _bound(f"{volume_ml:,} mL".replace(",", " ")) if volume_ml else ""


def _bound(text: str) -> str:
    """Return the text with its blanks made unbreakable: *no acid* may not end as *no*."""
    return text.replace(" ", _NO_BREAK)


def _joined(*pieces: str) -> str:
    return " · ".join(piece for piece in pieces if piece)


def printable(text: str) -> str:
    """Return the text as the label's fonts can show it: accents they lack are left off."""
    shown = []
    for character in unicodedata.normalize("NFC", text).translate(_THIN_SPACES):
        if _has_glyph(character):
            shown.append(character)
        else:
            plain = unicodedata.normalize("NFKD", character)
            shown.append("".join(piece for piece in plain if _has_glyph(piece)) or "?")
    return "".join(shown)


def _has_glyph(character: str) -> bool:
    if unicodedata.category(character) == "Cc":
        return False
    try:
        character.encode(_FONT_ENCODING)
    except UnicodeEncodeError:
        return False
    return True
