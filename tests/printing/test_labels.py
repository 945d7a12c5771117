"""Labels as a printer gets them: rendered at 150 dpi, read by a QR reader, measured."""

import io
import random
import re
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace

import pypdfium2 as pdfium
import pytest
import zxingcpp
from PIL import Image

from fieldapp.domain import codes
from fieldapp.printing.labels import (
    DEFAULT_SHEET,
    BadLabel,
    BadSheet,
    CannotPrint,
    Label,
    Roll,
    Sheet,
    labels_pdf,
    parse_roll,
    parse_sheet,
)

THIRTY = "3x10,66.7x25.4,left=4.8,top=12.7,gap=3.2x0,page=letter"
SMALLEST = Roll(40, 20)
ROLLS = [
    SMALLEST,
    Roll(50, 25),
    Roll(62, 29),
    Roll(102, 51),
    Roll(40, 60),
    Roll(40, 40),
    Roll(48, 20),
]
POINTS_A_MM = 72 / 25.4
# A hundredth of a millimetre: reportlab writes lengths to a few decimals.
ROUNDING_POINTS = 0.03

# Invented, and nowhere on a label whatever else is.
PRIVATE_NAME = "Orla Vantongeren"
PRIVATE_ADDRESS = "17 Quillhaven Rise"


def new_codes(count: int, seed: int = 7) -> list[str]:
    source = random.Random(seed)
    return [codes.new_code(source.choice) for _ in range(count)]


def label(code: str = "2HB4X90TC7T", **changes: object) -> Label:
    usual: dict[str, object] = {
        "site": "Q-0412",
        "draw": 1,
        "draw_words": "Draw 1 · first litre",
        "volume_ml": 1000,
        "analyse": ("lead", "copper"),
        "route": "north-2",
    }
    return Label(code, **(usual | changes))  # type: ignore[arg-type]


def a_code(seed: int = 7) -> str:
    return new_codes(1, seed)[0]


def spare(code: str) -> Label:
    return Label(code, volume_ml=1000, analyse=("lead", "copper"), route="north-2")


def crowded(code: str) -> Label:
    """Return a label whose every word is far too long."""
    return Label(
        code=code,
        site="WESTERN-DISTRICT-0412-KITCHEN-BESIDE-THE-STAIR-" + "W" * 40,
        draw=12,
        draw_words="Draw 12 · the sequential litre after a flush of five minutes, kept",
        volume_ml=1000,
        analyse=("lead", "copper", "zinc", "iron", "manganese", "orthophosphate", "sulfate"),
        preservative="acid",
        route="a-route-whose-name-goes-on-and-on-and-on-for-the-whole-of-the-northern-side",
        purpose_words="investigation asked for by the resident of the house next door",
        note="A note " + "of very many words " * 12,
    )


def crowded_spare(code: str) -> Label:
    return replace(crowded(code), site="", draw=0)


def crowded_unanalysed(code: str) -> Label:
    return replace(crowded(code), analyse=())


def many_long_analyses(code: str) -> Label:
    return replace(crowded(code), analyse=("a-substance-with-a-very-long-name-" * 3,) * 9)


MAKERS = [label, spare, crowded, crowded_spare, crowded_unanalysed, many_long_analyses]


def printed(labels: list[Label], **paper: object) -> bytes:
    out = io.BytesIO()
    labels_pdf(labels, out, **paper)  # type: ignore[arg-type]
    return out.getvalue()


def pages(pdf: bytes) -> list[pdfium.PdfPage]:
    return list(pdfium.PdfDocument(pdf))


def picture(page: pdfium.PdfPage, dpi: int = 150) -> Image.Image:
    return page.render(scale=dpi / 72).to_pil().convert("L")


def read_codes(pdf: bytes) -> list[str]:
    found = []
    for page in pages(pdf):
        read = zxingcpp.read_barcodes(picture(page), formats=zxingcpp.BarcodeFormat.QRCode)
        found += [barcode.text for barcode in read]
    return found


def text_of(pdf: bytes) -> str:
    return " ".join(words_of(page) for page in pages(pdf))


def words_of(page: pdfium.PdfPage) -> str:
    return re.sub(r"\s+", " ", page.get_textpage().get_text_range())


def boxes(page: pdfium.PdfPage) -> Iterator[tuple[float, float, float, float]]:
    """Yield left, bottom, right, top of everything drawn on a page, in points."""
    for thing in page.get_objects():
        yield thing.get_bounds()


def outside(box: tuple[float, float, float, float], sheet: Sheet) -> bool:
    """Tell whether a box lies in no label of the sheet."""
    left, bottom, right, top = box
    for place in range(sheet.labels_a_page):
        label_left, label_top = (side * POINTS_A_MM for side in sheet.corner_mm(place))
        page_top = sheet.page_mm[1] * POINTS_A_MM
        label_right = label_left + sheet.label_width_mm * POINTS_A_MM
        label_bottom = page_top - label_top - sheet.label_height_mm * POINTS_A_MM
        if (
            left >= label_left - ROUNDING_POINTS
            and right <= label_right + ROUNDING_POINTS
            and bottom >= label_bottom - ROUNDING_POINTS
            and top <= page_top - label_top + ROUNDING_POINTS
        ):
            return False
    return True


@pytest.mark.parametrize("count", [1, 30, 300])
def test_every_label_of_a_sheet_is_read_at_150_dpi(count):
    wanted = new_codes(count)
    pdf = printed([label(code) for code in wanted], sheet=parse_sheet(THIRTY))
    assert len(pages(pdf)) == -(-count // 30)
    assert sorted(read_codes(pdf)) == sorted(wanted)


def test_every_label_of_our_own_sheet_is_read_at_150_dpi():
    wanted = new_codes(30)
    pdf = printed([label(code) for code in wanted])
    assert len(pages(pdf)) == 2
    assert sorted(read_codes(pdf)) == sorted(wanted)


@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_a_roll_has_one_label_a_page_in_the_order_given(roll):
    wanted = new_codes(12)
    pdf = printed([label(code) for code in wanted], roll=roll)
    size = (roll.width_mm * POINTS_A_MM, roll.height_mm * POINTS_A_MM)
    assert all(page.get_size() == pytest.approx(size, abs=0.01) for page in pages(pdf))
    assert read_codes(pdf) == wanted


def test_the_labels_of_a_sheet_run_along_the_rows():
    wanted = new_codes(8)
    sheet = parse_sheet("2x3,90x40,left=10,top=10,page=a4")
    first, second = pages(printed([label(code) for code in wanted], sheet=sheet))
    read = zxingcpp.read_barcodes(picture(first), formats=zxingcpp.BarcodeFormat.QRCode)
    in_rows = sorted(read, key=lambda it: (it.position.top_left.y // 200, it.position.top_left.x))
    assert [barcode.text for barcode in in_rows] == wanted[:6]
    assert words_of(second).count("Site") == 2


@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_a_label_says_code_draw_site_analyses_and_preservative(roll):
    code = a_code()
    text = text_of(printed([label(code)], roll=roll))
    assert codes.grouped(code) in text
    for words in ("Draw 1", "first litre", "1 000 mL", "Site Q-0412", "lead, copper", "no acid"):
        assert words in text
    for caption in ("date", "time", "initials"):
        assert caption in text


def test_a_roomy_label_says_how_the_bottle_is_treated():
    text = text_of(printed([label(a_code(), purpose_words="compliance")]))
    assert "Do not rinse. Cold water only." in text
    assert "On the bottle, not on the cap." in text
    assert "compliance · Route north-2" in text


@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_a_bottle_with_acid_warns_on_every_size_of_label(roll):
    text = text_of(printed([label(a_code(), preservative="acid")], roll=roll))
    assert "lead, copper · acid" in text or "lead, copper acid" in text
    assert "no acid" not in text
    assert "Acid inside" in text
    assert "Do not rinse" in text


def test_a_note_takes_the_place_of_cold_water_only():
    blank = label(a_code(), draw_words="Field blank", note="Laboratory water, poured at the tap.")
    for roll in ROLLS:
        text = text_of(printed([blank], roll=roll))
        assert "Laboratory water, poured at the tap." in text
        assert "Cold water only" not in text


def test_a_spare_leaves_site_and_draw_to_the_pen():
    for roll in ROLLS:
        text = text_of(printed([spare(a_code())], roll=roll))
        assert "Spare · 1 000 mL" in text
        assert "lead, copper · no acid" in text
        assert re.search(r"site draw .*date time initials", text)
        assert "Site" not in text
        assert "Draw" not in text


def test_a_bottle_that_is_not_analysed_says_so():
    assert "Site Q-0412 · not analysed" in text_of(printed([label(a_code(), analyse=())]))
    for roll in ROLLS:
        text = text_of(printed([crowded_unanalysed(a_code())], roll=roll))
        assert "not analysed" in text
        assert "1 analysis" not in text


def test_no_name_and_no_address_can_get_onto_a_label():
    fields = set(Label.__dataclass_fields__)
    assert not fields & {"name", "address", "contact", "phone", "access", "resident"}
    pdf = printed([label(code) for code in new_codes(30)])
    for private in (PRIVATE_NAME, PRIVATE_ADDRESS):
        assert private not in text_of(pdf)
        assert private.encode() not in pdf


def test_the_search_for_a_private_name_would_find_it():
    # The test above stands on this search; here the name is put where it must never be.
    assert PRIVATE_NAME in text_of(printed([label(a_code(), note=PRIVATE_NAME)]))


@pytest.mark.parametrize("text", [PRIVATE_NAME, "2HB4X90TC7", "2HB4X90TC7A", "", "Q-0412"])
def test_nothing_but_a_bottle_code_enters_the_qr(text):
    out = io.BytesIO()
    with pytest.raises(codes.BadCode):
        labels_pdf([label(a_code()), label(text)], out)
    assert out.getvalue() == b""


@pytest.mark.parametrize("make", MAKERS)
@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_nothing_leaves_the_label_on_a_roll(make, roll):
    for page in pages(printed([make(code) for code in new_codes(3)], roll=roll)):
        assert [box for box in boxes(page) if outside(box, roll.as_sheet())] == []


@pytest.mark.parametrize("make", MAKERS)
def test_nothing_leaves_the_labels_of_a_sheet(make):
    sheet = parse_sheet(THIRTY)
    for page in pages(printed([make(code) for code in new_codes(33)], sheet=sheet)):
        assert len(list(boxes(page))) >= 3 * 8
        assert [box for box in boxes(page) if outside(box, sheet)] == []


def test_only_cutting_marks_lie_outside_our_own_sheets_labels():
    (page,) = pages(printed([crowded(code) for code in new_codes(24)]))
    (marks,) = [box for box in boxes(page) if outside(box, DEFAULT_SHEET)]
    width, height = (side * POINTS_A_MM for side in DEFAULT_SHEET.page_mm)
    left, bottom, right, top = marks
    assert left > 0
    assert bottom > 0
    assert right < width
    assert top < height
    # and none of them touches a label
    bare = picture(pages(printed([label(a_code())]))[0])
    left_mm, top_mm = DEFAULT_SHEET.corner_mm(23)
    ink = bare.crop([round(mm * 150 / 25.4) for mm in (left_mm, top_mm, left_mm + 64, top_mm + 32)])
    assert ink.getextrema() == (255, 255)


@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_words_stand_clear_of_each_other(roll):
    for make in MAKERS:
        (page,) = pages(printed([make(a_code())], roll=roll))
        texts = [thing.get_bounds() for thing in page.get_objects() if thing.type == 1]
        for number, one in enumerate(texts):
            for other in texts[number + 1 :]:
                apart_x = one[2] <= other[0] + 0.1 or other[2] <= one[0] + 0.1
                apart_y = one[3] <= other[1] + 0.1 or other[3] <= one[1] + 0.1
                assert apart_x or apart_y, (one, other)


@pytest.mark.parametrize("roll", ROLLS, ids=str)
def test_the_qr_is_14_mm_wide_and_keeps_its_quiet_zone(roll):
    (page,) = pages(printed([crowded(a_code())], roll=roll))
    things = [(thing.type, thing.get_bounds()) for thing in page.get_objects()]
    symbol = max((box for kind, box in things if kind == 2), key=lambda box: box[3] - box[1])
    left, bottom, right, top = symbol
    module = (right - left) / 21
    quiet = 4 * module - ROUNDING_POINTS
    assert (29 * module) / POINTS_A_MM >= 14
    if roll.width_mm >= 48:
        assert (right - left) / POINTS_A_MM >= 14
    assert left >= quiet
    assert bottom >= quiet
    assert top <= roll.height_mm * POINTS_A_MM - quiet
    for _kind, box in things:
        if box != symbol:
            assert box[0] >= right + quiet or box[3] <= bottom - quiet


def test_each_qr_is_one_filled_path():
    (page,) = pages(printed([label(a_code())], roll=Roll(62, 29)))
    filled = [box for box in page.get_objects() if box.type == 2]
    # one for the symbol, three for the pen's lines
    assert len(filled) == 4


def test_a_pen_has_room_to_write():
    for roll in ROLLS:
        for make in (label, spare):
            (page,) = pages(printed([make(a_code())], roll=roll))
            rules = [box for box in boxes(page) if box[3] - box[1] < 1]
            assert len(rules) == (3 if make is label else 5)
            for left, rule, right, _top in rules:
                above = [
                    box[1] - rule
                    for box in boxes(page)
                    if box[1] > rule + 1 and box[0] < right and box[2] > left
                ]
                assert min(above) / POINTS_A_MM >= 2.8, roll
                assert (right - left) / POINTS_A_MM >= 5, roll


def test_a_crowded_label_still_shows_code_and_preservative():
    for roll in ROLLS:
        for make in MAKERS[2:]:
            code = a_code()
            text = text_of(printed([make(code)], roll=roll))
            assert codes.grouped(code) in text
            before_the_pen = text.partition("date")[0]
            assert re.search(r"\bacid\b", before_the_pen), (roll, text)
            assert "Acid inside" in text


def test_words_too_long_for_any_size_are_cut_before_the_volume():
    for roll in ROLLS:
        text = text_of(printed([label(a_code(), draw=0, draw_words="W" * 90)], roll=roll))
        assert re.search(r"W+… · 1 000 mL", text)


def test_a_site_code_that_cannot_be_shown_is_refused_and_not_changed():
    with pytest.raises(BadLabel, match="“Ω-12”"):
        printed([label(a_code(), site="Ω-12")])


def test_words_of_other_languages_keep_the_letters_that_can_be_shown():
    text = text_of(printed([label(a_code(), draw_words="Čtvrtý litr, señal ñ ü ß")]))
    assert "Ctvrtý litr, señal ñ ü ß" in text


def test_printing_again_gives_the_same_bytes():
    labels = [label(code) for code in new_codes(40)]
    assert printed(labels) == printed(labels)
    assert printed(labels) != printed(labels[1:])


def test_progress_counts_every_label():
    told: list[tuple[int, int]] = []
    labels_pdf(
        [label(code) for code in new_codes(31)],
        io.BytesIO(),
        progress=lambda done, of: told.append((done, of)),
    )
    assert told == [(number, 31) for number in range(1, 32)]


def test_no_bottles_and_a_strange_preservative_are_refused_in_words():
    with pytest.raises(BadLabel, match="no bottle"):
        printed([])
    with pytest.raises(BadLabel, match=r"“salt”\. It may be none or acid"):
        printed([label(a_code(), preservative="salt")])


def test_a_sheet_and_a_roll_together_are_refused():
    with pytest.raises(BadSheet, match="Name one of them"):
        printed([label(a_code())], sheet=DEFAULT_SHEET, roll=SMALLEST)


def test_our_own_sheet_prints_on_a4_and_letter_without_scaling():
    width, height = DEFAULT_SHEET.page_mm
    assert width <= min(210.0, 215.9)
    assert height <= min(297.0, 279.4)


def test_a_sheet_is_read_with_all_its_parts():
    assert parse_sheet(THIRTY) == Sheet("letter", 3, 10, 66.7, 25.4, 4.8, 12.7, 3.2, 0.0)
    written = " 2X4 , 80 x 50 ".replace(" x ", "x") + ",PAGE=A4, gap = 5x2.5,left=0,top=3"
    assert parse_sheet(written) == Sheet("a4", 2, 4, 80, 50, 0, 3, 5, 2.5)
    assert parse_sheet("1x1,60x30,page=100x80").page_mm == (100, 80)


def test_a_sheet_without_margins_stands_in_the_middle():
    sheet = parse_sheet("2x3,90x40,page=a4,gap=10x5")
    assert (sheet.left_mm, sheet.top_mm) == (10, 83.5)


def test_labels_may_reach_the_very_edge_of_the_page():
    assert parse_sheet("3x8,70x37.125,left=0,top=0,page=a4").labels_a_page == 24


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "too short"),
        ("3x10", "too short"),
        ("3by10,66x25,page=a4", "“3by10” cannot be read. Write columns x rows"),
        ("3x10,66,page=a4", "“66” cannot be read"),
        ("3x10,nanxinf,page=a4", "“nanxinf” cannot be read"),
        ("3x10,-66x25,page=a4", "“-66x25” cannot be read"),
        ("3x10,66x25", "names no page. Add page=letter, page=a4"),
        ("3x10,66x25,page=tabloid", "“tabloid” cannot be read. Write page=letter"),
        ("3x10,66x25,page=a4,page=a4", "page= twice"),
        ("3x10,66x25,page=a4,right=4", "“right=4” of the sheet is not known"),
        ("3x10,66x25,page=a4,4.8", "“4.8” of the sheet is not known"),
        ("3x10,66x25,page=a4,left=-1", "“left=-1” cannot be read"),
        ("3x10,66x25,page=a4,top=1e1", "“top=1e1” cannot be read"),
        ("3x10,66x25,page=a4,gap=3", "“3” cannot be read. Write two gaps"),
        ("0x10,66x25,page=a4", "0 labels beside each other cannot be"),
        ("3x999,66x25,page=a4", "999 labels beside each other cannot be"),
        ("3x10,39.9x25,page=a4", "39.9 x 25 mm is too small"),
        ("3x10,66x19,page=a4", "smallest is 40 x 20 mm"),
        ("3x10,66x25,page=0x0", "A page of 0 x 0 mm cannot be"),
        (
            "3x10,66.7x25.4,left=14.8,top=12.7,gap=3.2x0,page=letter",
            "across, 3 of 66.7 mm with gaps of 3.2 mm, beginning at 14.8 mm, "
            "end at 221.3 mm; the page ends at 215.9 mm",
        ),
        ("3x12,60x25.4,top=0,page=a4", "down, 12 of 25.4 mm .* end at 304.8 mm; .* 297 mm"),
        ("4x10,60x25.4,page=a4", "across, 4 of 60 mm"),
    ],
)
def test_a_sheet_that_cannot_be_is_refused_with_what_would_be_right(text, says):
    pattern = says if ".*" in says else re.escape(says)
    with pytest.raises(BadSheet, match=pattern) as refused:
        parse_sheet(text)
    assert isinstance(refused.value, CannotPrint)


def test_a_roll_is_read_and_a_bad_one_refused():
    assert parse_roll(" 62x29 ") == Roll(62, 29)
    with pytest.raises(BadSheet, match="“62” cannot be read"):
        parse_roll("62")
    with pytest.raises(BadSheet, match="30 x 20 mm is too small"):
        parse_roll("30x20")
    with pytest.raises(BadSheet, match="at most 1000 mm"):
        parse_roll("1200x29")


def test_heavy_libraries_wait_until_a_label_is_drawn():
    asked = (
        "import sys, fieldapp.printing.labels;"
        "print(sorted({'reportlab', 'qrcode', 'PIL'} & set(sys.modules)))"
    )
    answer = subprocess.run(
        [sys.executable, "-c", asked], capture_output=True, text=True, check=True, timeout=60
    )
    assert answer.stdout.strip() == "[]"
