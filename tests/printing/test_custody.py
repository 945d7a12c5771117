"""The custody record as a laboratory gets it: the words on the page, the lines for pens."""

import io
from dataclasses import replace

import pypdfium2 as pdfium
import pytest

from fieldapp.domain import codes
from fieldapp.domain.codes import grouped
from fieldapp.printing.custody import PAGE_MM, CustodyRecord, Line, custody_pdf
from fieldapp.printing.sheets import CannotPrint

POINTS_A_MM = 72 / 25.4
LINE = Line(
    code="2HB4X90TC7T", site="Q-0412", tap="kitchen", draw="Draw 1 · first litre",
    volume="1000 mL", analyses="lead, copper", preservative="no acid",
    collected="2027-05-04 06:31", stood="6 h 10, stated",
)  # fmt: skip
RECORD = CustodyRecord(
    title="Cooler 3, Tuesday 2027-05-04", cooler="C-7F3K2Q", round="Spring round", route="North 2",
    laboratory="Invented Laboratory", sampler="Wrenna Oddquist", seals=("88 214",), lines=(LINE,),
    set_hash="ab" * 32,
)  # fmt: skip


def pages_of(record: CustodyRecord) -> pdfium.PdfDocument:
    out = io.BytesIO()
    custody_pdf(record, out)
    return pdfium.PdfDocument(out.getvalue())


def text_of(record: CustodyRecord, page: int = 0) -> str:
    return " ".join(pages_of(record)[page].get_textpage().get_text_range().split())


def lines(count: int) -> tuple[Line, ...]:
    return tuple(replace(LINE, code=codes.new_code()) for _ in range(count))


def test_a_line_says_all_that_a_laboratory_receives_a_bottle_by():
    page = text_of(RECORD)
    for said in (
        "2HB4-X90T-C7T", "Q-0412, kitchen", "Draw 1 · first litre", "1000 mL",
        "lead, copper · no acid", "2027-05-04 06:31", "6 h 10, stated",
    ):  # fmt: skip
        assert said in page


def test_the_head_names_cooler_round_route_sampler_laboratory_and_seals():
    page = text_of(RECORD)
    for said in (
        "Cooler 3, Tuesday 2027-05-04", "C-7F3K2Q", "Spring round", "North 2", "Wrenna Oddquist",
        "Invented Laboratory", "88 214", "1 bottle",
    ):  # fmt: skip
        assert said in page


def test_three_hands_give_and_three_take_with_date_and_time():
    page = text_of(RECORD)
    assert page.count("signature and name date time") == 6
    assert "Relinquished by" in page
    assert "Received by" in page


def test_deviations_stand_beside_the_bottle():
    told = replace(LINE, deviations="The water stood too short before the draw (low)")
    assert "The water stood too short before the draw (low)" in text_of(
        replace(RECORD, lines=(told,))
    )


def strokes(record: CustodyRecord) -> int:
    """Return how many things are drawn on the first page beside its words."""
    page = pages_of(record)[0]
    return sum(1 for one in page.get_objects() if one.type == 2)  # a path


def test_a_corrected_time_is_struck_through_and_still_there():
    told = replace(RECORD, lines=(replace(LINE, struck=("2027-05-04 06:13",)),))
    assert "2027-05-04 06:13" in text_of(told)
    assert strokes(told) == strokes(RECORD) + 1


def test_a_broken_seal_is_struck_through_beside_the_new_one():
    told = replace(RECORD, seals=("88 219",), broken=("88 214",))
    assert "88 219 broken: 88 214" in text_of(told)
    assert strokes(told) == strokes(RECORD) + 1


@pytest.mark.parametrize("count", [1, 17, 25, 27])
def test_a_cooler_full_is_one_page(count):
    record = replace(RECORD, lines=lines(count))
    assert len(pages_of(record)) == 1
    page = text_of(record)
    assert all(grouped(one.code) in page for one in record.lines)


def test_more_bottles_take_more_pages_each_with_the_signatures():
    record = replace(RECORD, lines=lines(60))
    assert len(pages_of(record)) == 3
    for number in range(3):
        page = text_of(record, number)
        assert f"page {number + 1} of 3" in page
        assert page.count("signature and name") == 6
    said = " ".join(text_of(record, number) for number in range(3))
    assert all(said.count(grouped(one.code)) == 1 for one in record.lines)


def test_the_page_fits_either_paper():
    page = pages_of(RECORD)[0]
    assert page.get_size() == pytest.approx([side * POINTS_A_MM for side in PAGE_MM], abs=0.1)
    assert PAGE_MM[0] <= 279.4
    assert PAGE_MM[1] <= 210.0


def test_nothing_is_drawn_beyond_the_page():
    long = replace(
        LINE, site="Q" * 40, tap="the tap at the far end of the upper corridor", draw="x" * 80,
        analyses="lead, copper, iron, manganese, zinc, turbidity", deviations="word " * 80,
        struck=("2027-05-04 06:13", "2027-05-04 06:14"), stood="6 h 10 – 7 h 40, stated",
    )  # fmt: skip
    record = replace(RECORD, lines=(long,) * 3, round="r" * 120, laboratory="l" * 120)
    page = pages_of(record)[0]
    wide, high = page.get_size()
    for one in page.get_objects():
        left, bottom, right, top = one.get_bounds()
        assert left >= 0
        assert bottom >= 0
        assert right <= wide
        assert top <= high


def test_the_same_record_gives_the_same_bytes():
    first, second = io.BytesIO(), io.BytesIO()
    custody_pdf(RECORD, first)
    custody_pdf(RECORD, second)
    assert first.getvalue() == second.getvalue()


def test_an_empty_cooler_has_nothing_to_sign_for():
    with pytest.raises(CannotPrint, match="nothing to sign for"):
        custody_pdf(replace(RECORD, lines=()), io.BytesIO())


def test_letters_that_the_fonts_lack_are_shown_plainly():
    assert "Zażółć" not in text_of(replace(RECORD, sampler="Zażółć"))
    assert "Zazó" in text_of(replace(RECORD, sampler="Zażółć"))
