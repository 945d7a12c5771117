"""The custody record of one cooler: a page for its lid, for a laboratory that installs nothing.

A line a bottle with what the laboratory needs to receive it, ruled lines for pen signatures, and
no name or address of a resident. A value that was corrected stands beside the new one, struck
through, as with a pen.

Source: fields of a custody record and of its transfers, EPA Region V, "Manual of Custody and
Non-Custody Sample Handling", 1978, and custody chapters of filed work plans (trade 5, READ S72,
S73, S74).
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, BinaryIO

from fieldapp.domain.codes import grouped
from fieldapp.printing.labels import printable
from fieldapp.printing.sheets import POINTS_A_MM, CannotPrint
from fieldapp.words import gettext as _
from fieldapp.words import ngettext

if TYPE_CHECKING:
    from reportlab.pdfgen.canvas import Canvas

PAGE_MM = (279.4, 210.0)
"""What A4 and Letter have in common, lying: either paper may be in the tray."""
MARGIN_MM = 9.0
PLAIN, BOLD, MONO = "Helvetica", "Helvetica-Bold", "Courier-Bold"
TALLEST_MM, LEAST_MM = 8.0, 4.0
"""A bottle's line: as tall as a pen likes, and never so low that it cannot be written on."""
SIGNED_MM = 46.0
HEAD_MM = 29.0
TRANSFERS = 3
ELLIPSIS = "..."


@dataclass(frozen=True)
class Line:
    """One bottle. ``struck`` are former values of ``collected``, the last two shown struck through.

    ``stood`` and ``deviations`` are short words; all texts are the reader's language.
    """

    code: str
    site: str = ""
    tap: str = ""
    draw: str = ""
    volume: str = ""
    analyses: str = ""
    preservative: str = ""
    collected: str = ""
    struck: tuple[str, ...] = ()
    stood: str = ""
    deviations: str = ""


@dataclass(frozen=True)
class CustodyRecord:
    """One cooler's record. ``broken`` are seals that were broken on the way, with why not said."""

    title: str
    cooler: str
    round: str
    route: str
    laboratory: str
    sampler: str
    seals: tuple[str, ...] = ()
    broken: tuple[str, ...] = ()
    handed: str = ""
    lines: tuple[Line, ...] = ()
    set_hash: str = ""


@dataclass(frozen=True)
class Column:
    """A column of the table: its head, the field it shows (empty: for a pen), its width in mm."""

    head: str
    field: str
    width_mm: float
    font: str = PLAIN

    def struck(self, line: Line) -> bool:
        """Say whether a former value of this line stands struck through in this column."""
        return self.field == "collected" and bool(line.struck)


def custody_pdf(record: CustodyRecord, out: BinaryIO) -> None:
    """Write the custody record as a PDF into ``out``; the same record gives the same bytes.

    It is one page up to the bottles that a pen still finds room for, then as many as it takes;
    the signatures stand on each.

    Raises:
        CannotPrint: No bottle is in the cooler.
    """
    from reportlab.pdfgen.canvas import Canvas

    if not record.lines:
        raise CannotPrint(_("No bottle is in that cooler, so there is nothing to sign for."))
    width, height = (side * POINTS_A_MM for side in PAGE_MM)
    canvas = Canvas(out, pagesize=(width, height), invariant=1)
    canvas.setTitle(_("Custody record"))
    canvas.setAuthor("")
    canvas.setCreator("Tapwitness")
    pages = _pages_of(record.lines)
    for number, lines in enumerate(pages, start=1):
        _draw_page(canvas, record, lines, number, len(pages))
        canvas.showPage()
    canvas.save()


def _pages_of(lines: Sequence[Line]) -> list[Sequence[Line]]:
    room = PAGE_MM[1] - 2 * MARGIN_MM - HEAD_MM - SIGNED_MM - TALLEST_MM
    most = int(room / LEAST_MM)
    return [lines[start : start + most] for start in range(0, len(lines), most)]


def _draw_page(
    canvas: "Canvas", record: CustodyRecord, lines: Sequence[Line], number: int, of: int
) -> None:
    top = PAGE_MM[1] - MARGIN_MM
    _draw_head(canvas, record, top, number, of)
    bottom = MARGIN_MM + SIGNED_MM
    room = top - HEAD_MM - TALLEST_MM - bottom
    _draw_table(canvas, lines, top - HEAD_MM, min(TALLEST_MM, room / len(lines)))
    _draw_signatures(canvas, record, bottom)


def _draw_head(canvas: "Canvas", record: CustodyRecord, top: float, number: int, of: int) -> None:
    _say(canvas, record.title, MARGIN_MM, top - 6, 17, BOLD)
    _say(canvas, _("Custody record"), 118, top - 6, 13, BOLD)
    paging = _("page {n} of {of}").format(n=number, of=of) if of > 1 else ""
    _say_right(canvas, " · ".join(filter(None, (record.cooler, paging))), top - 6, 9)
    rows = (
        (_("Round"), record.round, _("Laboratory"), record.laboratory),
        (_("Route"), record.route, _("Sampler"), record.sampler),
    )
    for row, (left, said, right, told) in enumerate(rows):
        y = top - 13 - 5 * row
        _pair(canvas, left, said, MARGIN_MM, y, 112)
        _pair(canvas, right, told, 145, y, 112)
    y = top - 23
    after = _pair(canvas, _("Seals"), ", ".join(record.seals) or _("none"), MARGIN_MM, y, 60)
    if record.broken:
        _say(canvas, _("broken:"), after + 3, y, 9)
        _struck(canvas, ", ".join(record.broken), after + 17, y, 9)
    count = ngettext("{n} bottle", "{n} bottles", len(record.lines)).format(n=len(record.lines))
    _say(canvas, count, 118, y, 10, BOLD)
    _pair(canvas, _("Handed over"), record.handed or _("not yet"), 145, y, 112)


def _columns() -> tuple[Column, ...]:
    return (
        Column(_("Bottle"), "code", 32.0, MONO),
        Column(_("Site, tap"), "place", 34.0),
        Column(_("Draw"), "draw", 24.0),
        Column(_("Volume"), "volume", 14.0),
        Column(_("Analyses, acid"), "analyses", 37.0),
        Column(_("Collected at"), "collected", 29.0),
        Column(_("Stood"), "stood", 22.0),
        Column(_("Not as the protocol says"), "deviations", 43.4),
        Column(_("Laboratory's number"), "", 26.0),
    )


def _draw_table(canvas: "Canvas", lines: Sequence[Line], top: float, tall: float) -> None:
    columns = _columns()
    edges = [MARGIN_MM]
    for column in columns:
        edges.append(edges[-1] + column.width_mm)
    for column, left in zip(columns, edges, strict=False):
        _fit(canvas, column.head, left + 0.8, top - 5, column.width_mm - 1.6, 7.5, BOLD)
    _rule(canvas, edges[0], top - TALLEST_MM + 1.5, edges[-1], 0.9)
    for row, line in enumerate(lines):
        base = top - TALLEST_MM + 1.5 - (row + 1) * tall
        for column, left in zip(columns, edges, strict=False):
            _draw_cell(canvas, line, column, left + 0.8, base, tall)
        _rule(canvas, edges[0], base, edges[-1], 0.3)
    last = top - TALLEST_MM + 1.5 - len(lines) * tall
    for edge in edges[1:-1]:
        _upright(canvas, edge, top - TALLEST_MM + 1.5, last)


def _draw_cell(
    canvas: "Canvas", line: Line, column: Column, x: float, base: float, tall: float
) -> None:
    wide, y = column.width_mm - 1.6, base + tall * (0.1 if column.struck(line) else 0.3)
    if not column.field:
        return
    if column.field == "deviations":
        _wrap(canvas, line.deviations, x, base, wide, tall)
        return
    if column.struck(line):
        _struck(canvas, ", ".join(line.struck[-2:]), x, base + tall * 0.58, 4.8)
    text = {
        "code": grouped(line.code),
        "place": ", ".join(filter(None, (line.site, line.tap))),
        "analyses": " · ".join(filter(None, (line.analyses, line.preservative))),
    }.get(column.field) or str(getattr(line, column.field, ""))
    _fit(canvas, text, x, y, wide, 6.5 if column.struck(line) else 8.0, column.font)


def _wrap(canvas: "Canvas", text: str, x: float, base: float, wide: float, tall: float) -> None:
    """Say a text in as many small lines as the row has room for; what is left over is named."""
    from reportlab.lib.utils import simpleSplit

    size, lead = 5.2, 1.85
    most = max(1, int((tall - 0.2) / lead))
    lines = simpleSplit(printable(text), PLAIN, size, wide * POINTS_A_MM)
    if len(lines) > most:
        lines = [*lines[: most - 1], lines[most - 1][:-3] + ELLIPSIS]
    for row, shown in enumerate(lines):
        _say(canvas, shown, x, base + tall - lead * (row + 1) + 0.15, size)


def _draw_signatures(canvas: "Canvas", record: CustodyRecord, top: float) -> None:
    """Rule the lines on which each hand signs that gives and that takes (trade 5)."""
    heads = (_("signature and name"), _("date"), _("time"))
    widths = (78.0, 24.0, 20.0)
    for side, title in enumerate((_("Relinquished by"), _("Received by"))):
        left = MARGIN_MM + side * 133
        _say(canvas, title, left, top - 5, 9, BOLD)
        for row in range(TRANSFERS):
            y, x = top - 14 - row * 10.5, left
            for head, width in zip(heads, widths, strict=True):
                _rule(canvas, x, y, x + width, 0.6)
                _say(canvas, head, x, y - 3, 6)
                x += width + 3
    note = _(
        "A mistake is struck through with one line, dated and initialled. "
        "A copy comes back with the report."
    )
    _say(canvas, note, MARGIN_MM, top - SIGNED_MM + 1, 7)
    _say_right(canvas, record.set_hash[:16], top - SIGNED_MM + 1, 6)


def _pair(canvas: "Canvas", name: str, said: str, x: float, y: float, wide: float) -> float:
    """Say a name and its value; return where the value ends, in mm."""
    _say(canvas, name, x, y, 7.5)
    start = x + 19
    return start + _fit(canvas, said, start, y, wide - 19, 10, BOLD)


def _say(canvas: "Canvas", text: str, x: float, y: float, size: float, font: str = PLAIN) -> None:
    canvas.setFont(font, size)
    canvas.drawString(x * POINTS_A_MM, y * POINTS_A_MM, printable(text))


def _say_right(canvas: "Canvas", text: str, y: float, size: float) -> None:
    canvas.setFont(PLAIN, size)
    right = (PAGE_MM[0] - MARGIN_MM) * POINTS_A_MM
    canvas.drawRightString(right, y * POINTS_A_MM, printable(text))


def _fit(
    canvas: "Canvas", text: str, x: float, y: float, wide: float, size: float, font: str = PLAIN
) -> float:
    """Say a text in that width: smaller by a quarter, then with its end cut; return its width."""
    from reportlab.pdfbase.pdfmetrics import stringWidth

    shown, room = printable(text), wide * POINTS_A_MM
    if stringWidth(shown, font, size) > room:
        size *= 0.75
    while len(shown) > 1 and stringWidth(shown, font, size) > room:
        shown = shown.removesuffix(ELLIPSIS)[:-1] + ELLIPSIS
        if shown == ELLIPSIS:
            break
    canvas.setFont(font, size)
    canvas.drawString(x * POINTS_A_MM, y * POINTS_A_MM, shown)
    return float(stringWidth(shown, font, size)) / POINTS_A_MM


def _struck(canvas: "Canvas", text: str, x: float, y: float, size: float) -> None:
    from reportlab.pdfbase.pdfmetrics import stringWidth

    shown = printable(text)
    _say(canvas, shown, x, y, size)
    wide = float(stringWidth(shown, PLAIN, size)) / POINTS_A_MM
    _rule(canvas, x, y + size * 0.11, x + wide, 0.6)


def _rule(canvas: "Canvas", x: float, y: float, to: float, thick: float) -> None:
    canvas.setLineWidth(thick)
    canvas.line(x * POINTS_A_MM, y * POINTS_A_MM, to * POINTS_A_MM, y * POINTS_A_MM)


def _upright(canvas: "Canvas", x: float, y: float, to: float) -> None:
    canvas.setLineWidth(0.3)
    canvas.line(x * POINTS_A_MM, y * POINTS_A_MM, x * POINTS_A_MM, to * POINTS_A_MM)
