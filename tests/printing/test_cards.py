"""The counter's cards as a printer gets them: rendered at 150 dpi and read by a QR reader."""

import io

import pypdfium2 as pdfium
import zxingcpp

from fieldapp.domain.cards import CARDS, read_card
from fieldapp.printing.cards import WORDS, cards_pdf


def printed() -> bytes:
    out = io.BytesIO()
    cards_pdf(out)
    return out.getvalue()


def test_every_card_is_read_from_the_printed_page_and_no_other():
    (page,) = pdfium.PdfDocument(printed())
    found = zxingcpp.read_barcodes(page.render(scale=150 / 72).to_pil())
    assert sorted(read_card(one.text) for one in found) == sorted(CARDS)


def test_every_card_has_its_word_beside_it():
    (page,) = pdfium.PdfDocument(printed())
    text = page.get_textpage().get_text_range()
    assert all(word in text for word in WORDS.values())


def test_the_same_cards_give_the_same_bytes():
    assert printed() == printed()
