"""The counter's cards as a page to cut: a QR, a word to find from across the counter, what it does.

Lengths are millimetres from the top left; one A4 page, two cards a row.
"""

from typing import TYPE_CHECKING, BinaryIO

from fieldapp.domain.cards import CARDS, text_of
from fieldapp.printing import qr
from fieldapp.printing.sheets import PAGES_MM, POINTS_A_MM
from fieldapp.words import N_
from fieldapp.words import gettext as _

if TYPE_CHECKING:
    from reportlab.pdfgen.canvas import Canvas

CARD_MM = (90.0, 62.0)
MARGIN_MM = (15.0, 20.0)
COLUMNS = 2
QR_MM = 40.0
GAP_MM = 4.0
WORD_SIZE, WORD_LEAST, SAYS_SIZE, TEXT_SIZE = 30.0, 12.0, 11.0, 7.0
BOLD, PLAIN = "Helvetica-Bold", "Helvetica"

WORDS = {
    "leak": N_("Leaks"),
    "low": N_("Too little"),
    "label": N_("Label"),
    "cracked": N_("Cracked"),
    "no record": N_("No record"),
    "hold": N_("Hold"),
    "undo": N_("Undo"),
}
SAYS = {
    "leak": N_("The next bottle leaks."),
    "low": N_("The next bottle holds too little water."),
    "label": N_("The next bottle's label cannot be read."),
    "cracked": N_("The next bottle is cracked."),
    "no record": N_("No record came with the next bottle."),
    "hold": N_("The next bottle is set aside."),
    "undo": N_("Takes a waiting card back, else the last receipt."),
}


def cards_pdf(out: BinaryIO) -> None:
    """Write the cards of the counter as one page of PDF; the same bytes each time."""
    from reportlab.pdfgen.canvas import Canvas

    width, height = (side * POINTS_A_MM for side in PAGES_MM["a4"])
    canvas = Canvas(out, pagesize=(width, height), invariant=1)
    canvas.setTitle(_("Cards of the counter"))
    canvas.setAuthor("")
    canvas.setCreator("Tapwitness")
    canvas.setFont(PLAIN, SAYS_SIZE)
    note = _("Scan a card, then its bottle. Cut along the lines.")
    canvas.drawString(MARGIN_MM[0] * POINTS_A_MM, height - 13 * POINTS_A_MM, _shown(note))
    for place, card in enumerate(CARDS):
        row, column = divmod(place, COLUMNS)
        left = MARGIN_MM[0] + column * CARD_MM[0]
        top = MARGIN_MM[1] + row * CARD_MM[1]
        canvas.saveState()
        canvas.translate(left * POINTS_A_MM, height - (top + CARD_MM[1]) * POINTS_A_MM)
        _draw_card(canvas, card)
        canvas.restoreState()
    canvas.showPage()
    canvas.save()


def _draw_card(canvas: "Canvas", card: str) -> None:
    """Draw one card with its lower left corner at the canvas's present origin."""
    width, height = (side * POINTS_A_MM for side in CARD_MM)
    canvas.setLineWidth(0.4)
    canvas.rect(0, 0, width, height)
    _draw_qr(canvas, card, (height - QR_MM * POINTS_A_MM) / 2)
    left = (QR_MM + GAP_MM) * POINTS_A_MM
    room = width - left - GAP_MM * POINTS_A_MM
    word = _shown(_(WORDS[card]))
    size = max(WORD_LEAST, min(WORD_SIZE, WORD_SIZE * room / _wide(word, BOLD, WORD_SIZE)))
    canvas.setFont(BOLD, size)
    canvas.drawString(left, height * 0.62, word)
    canvas.setFont(PLAIN, SAYS_SIZE)
    for number, line in enumerate(_broken(_shown(_(SAYS[card])), room)):
        canvas.drawString(left, height * 0.62 - (number + 1.6) * SAYS_SIZE * 1.25, line)
    canvas.setFont(PLAIN, TEXT_SIZE)
    canvas.drawString(left, 3 * POINTS_A_MM, text_of(card))


def _draw_qr(canvas: "Canvas", card: str, bottom: float) -> None:
    side = QR_MM * POINTS_A_MM / qr.OUTER_MODULES
    canvas.saveState()
    canvas.translate(0, bottom)
    canvas.scale(side, side)
    path = canvas.beginPath()
    for column, row, length in qr.runs(qr.card_modules(card)):
        path.rect(column, row, length, 1)
    canvas.drawPath(path, stroke=0, fill=1)
    canvas.restoreState()


def _broken(text: str, room: float) -> list[str]:
    lines: list[str] = []
    for word in text.split():
        longer = f"{lines[-1]} {word}" if lines else word
        if lines and _wide(longer, PLAIN, SAYS_SIZE) <= room:
            lines[-1] = longer
        else:
            lines.append(word)
    return lines


def _wide(text: str, font: str, size: float) -> float:
    from reportlab.pdfbase.pdfmetrics import stringWidth

    return float(stringWidth(text, font, size))


def _shown(text: str) -> str:
    """Return the text as the fonts of every PDF reader can show it."""
    return text.encode("cp1252", "replace").decode("cp1252")
