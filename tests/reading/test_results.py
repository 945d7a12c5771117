"""The laboratory's results as a file: read whole, or refused with every fault at once."""

import csv
import hashlib
import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.codes import check_character
from fieldapp.domain.levels import read_level
from fieldapp.reading import BadFile, ResultsFile, read_results
from tests.reading.bench import assert_whole

ONE = "F8QY40YGEC9"
TWO = "TAPW1TNESSK"
STRANGE = "0000000001" + check_character("0000000001")
NUMBERS = {"W-1": ONE, "W-2": TWO}
NAME = "may.csv"
HEAD = "bottle,laboratory number,analyte,value,unit,detection,reporting,method,analysed at"
GOOD = f"{ONE},W-1,lead,3.2,ug/L,0.3,1,EPA 200.8,2027-05-07"


def known(bottle: str, number: str) -> str | None:
    """Know two bottles and the laboratory's numbers of both."""
    if bottle:
        return bottle if bottle in (ONE, TWO) else None
    return NUMBERS.get(number)


def read(*rows: str, head: str = HEAD, encoding: str = "utf-8") -> ResultsFile:
    return read_results("\n".join((head, *rows)).encode(encoding), NAME, resolve=known)


def faults(*rows: str, head: str = HEAD) -> list[tuple[int, str, str]]:
    with pytest.raises(BadFile) as bad:
        read(*rows, head=head)
    for fault in bad.value.faults:
        assert_whole(fault)
        assert fault.line.startswith(NAME)
    return [(fault.row, fault.path, fault.kind) for fault in bad.value.faults]


def row(**cells: str) -> str:
    """Return the good row with some cells put otherwise."""
    names = [name.replace(" ", "_") for name in HEAD.split(",")]
    texts = {**dict(zip(names, GOOD.split(","), strict=True)), **cells}
    return ",".join(texts[name] for name in names)


def test_a_row_is_read_as_the_laboratory_wrote_it():
    found = read(GOOD)
    (one,) = found.rows
    assert (one.row, one.bottle, one.laboratory_number, one.analyte) == (2, ONE, "W-1", "lead")
    assert (one.value, one.unit, one.qualifier) == ("3.2", "ug/L", "")
    assert (one.detection, one.reporting) == ("0.3", "1")
    assert (one.method, one.analysed_at) == ("EPA 200.8", "2027-05-07")
    assert found.notes == ()


def test_the_file_is_known_by_the_bytes_as_they_came():
    data = f"{HEAD}\n{GOOD}\n".encode()
    found = read_results(data, NAME, resolve=known)
    assert found.sha256 == hashlib.sha256(data).hexdigest()
    (fact,) = found.facts
    assert (fact.file, fact.row, fact.bottle) == (found.sha256, 2, ONE)


@pytest.mark.parametrize(
    ("written", "value", "qualifier"),
    [
        ("12.3", "12.3", ""),
        ("12.30", "12.30", ""),
        ("0", "0", ""),
        (".5", "0.5", ""),
        ("<2", "2", "<"),
        ("< 0.002", "0.002", "<"),
        ("ND", "", "ND"),
        ("nd", "", "ND"),
        ("n.d.", "", "ND"),
        ("1e1", "10", ""),
        ('"12,3"', "12.3", ""),
    ],
)
def test_levels_keep_their_digits_and_qualifier(written, value, qualifier):
    (one,) = read(row(value=written)).rows
    assert (one.value, one.qualifier) == (value, qualifier)
    again = read_level({"ND": "ND", "<": f"<{value}"}.get(qualifier, value), one.unit)
    assert again == read_level(written.strip('"'), one.unit)


@pytest.mark.parametrize(
    ("written", "unit"),
    [("ug/L", "ug/L"), ("µg/L", "ug/L"), ("μg/l", "ug/L"), ("ppb", "ug/L"), ("MG/L", "mg/L")],
)
def test_units_come_in_one_spelling(written, unit):
    assert read(row(unit=written)).rows[0].unit == unit


@pytest.mark.parametrize(
    ("written", "analyte"), [("Pb", "lead"), ("LEAD", "lead"), ("cu", "copper")]
)
def test_analytes_come_in_one_spelling(written, analyte):
    assert read(row(analyte=written)).rows[0].analyte == analyte


@pytest.mark.parametrize(
    ("written", "kept"),
    [
        ("2027-05-07", "2027-05-07"),
        ("2027-05-07T14:30", "2027-05-07T14:30"),
        ("2027-05-07 14:30:05", "2027-05-07T14:30:05"),
        ("2027-05-07T14:30Z", "2027-05-07T14:30:00.000Z"),
        ("2027-05-07T14:30-06:00", "2027-05-07T20:30:00.000Z"),
        ("", ""),
    ],
)
def test_moments_are_iso_and_never_guessed(written, kept):
    assert read(row(analysed_at=written)).rows[0].analysed_at == kept


def test_a_number_never_heard_of_is_a_note_where_the_code_says_which_bottle():
    found = read(row(laboratory_number="W-9"))
    (one,) = found.rows
    assert (one.bottle, one.laboratory_number) == (ONE, "W-9")
    (note,) = found.notes
    assert (note.kind, note.row) == ("number-unheard", 2)
    assert "W-9" in note.line


WRONG = [
    ({"bottle": "F8QY40YGEC8"}, "bottle", "code-check"),
    ({"bottle": "F8QY"}, "bottle", "code-length"),
    ({"bottle": "F8QY40YGEU9"}, "bottle", "code-character"),
    ({"bottle": STRANGE}, "bottle", "unknown-bottle"),
    ({"bottle": "", "laboratory_number": "W-9"}, "laboratory_number", "unknown-number"),
    ({"laboratory_number": "W-2"}, "laboratory_number", "disagree"),
    ({"bottle": "", "laboratory_number": ""}, "bottle", "no-bottle"),
    ({"bottle": "=A1"}, "bottle", "formula"),
    ({"analyte": "tin"}, "analyte", "analyte"),
    ({"analyte": ""}, "analyte", "analyte-blank"),
    ({"value": ""}, "value", "value-blank"),
    ({"value": "<"}, "value", "value-blank"),
    ({"value": "low"}, "value", "value-number"),
    ({"value": "nan"}, "value", "value-number"),
    ({"value": "inf"}, "value", "value-number"),
    ({"value": "3.2 ug/L"}, "value", "value-number"),
    ({"value": "-1"}, "value", "value-negative"),
    ({"value": '"1,234"'}, "value", "value-thousands"),
    ({"value": ">500"}, "value", "value-above"),
    ({"value": "<0"}, "value", "value-zero-limit"),
    ({"value": "=1+1"}, "value", "formula"),
    ({"value": "@SUM"}, "value", "formula"),
    ({"value": "+cmd"}, "value", "formula"),
    ({"unit": ""}, "unit", "unit-blank"),
    ({"unit": "grains"}, "unit", "unit"),
    ({"detection": "2"}, "detection", "value-limits"),
    ({"detection": "<1"}, "detection", "value-number"),
    ({"detection": "0"}, "detection", "value-zero-limit"),
    ({"reporting": "x"}, "reporting", "value-number"),
    ({"method": "m" * 81}, "method", "too-long"),
    ({"method": "a\x07b"}, "method", "control"),
    ({"method": "=HYPERLINK(A1)"}, "method", "formula"),
    ({"analysed_at": "05/07/2027"}, "analysed_at", "no-time"),
    ({"analysed_at": "7 May 2027"}, "analysed_at", "no-time"),
    ({"analysed_at": "2027-02-30"}, "analysed_at", "no-time"),
    ({"analysed_at": "2027-05-07T25:00"}, "analysed_at", "no-time"),
    ({"analysed_at": "0001-01-01T00:00+14:00"}, "analysed_at", "no-time"),
]


@pytest.mark.parametrize(("cells", "column", "kind"), WRONG)
def test_a_wrong_cell_is_named_with_row_and_column(cells, column, kind):
    assert faults(GOOD.replace(ONE, TWO).replace("W-1", "W-2"), row(**cells)) == [(3, column, kind)]


def test_all_wrong_cells_come_at_once_and_nothing_is_read():
    wrong = [row(**cells) for cells, _, _ in WRONG]
    assert faults(*wrong) == [(n, column, kind) for n, (_, column, kind) in enumerate(WRONG, 2)]


def test_several_faults_of_one_row_come_together():
    found = faults(row(bottle="F8QY", analyte="tin", value="-1", unit="", analysed_at="soon"))
    assert {column for _, column, _ in found} == {
        "bottle",
        "analyte",
        "value",
        "unit",
        "analysed_at",
    }


def test_either_name_of_a_bottle_is_enough():
    (one,) = read(row(bottle="")).rows
    assert (one.bottle, one.laboratory_number) == (ONE, "W-1")
    (one,) = read(row(laboratory_number="")).rows
    assert (one.bottle, one.laboratory_number) == (ONE, "")


def test_a_laboratory_may_report_down_to_its_detection_limit():
    (one,) = read(row(detection="1", reporting="1")).rows
    assert (one.detection, one.reporting) == ("1", "1")


def test_a_code_is_read_as_people_write_it():
    assert read(row(bottle="f8qy-4oyg-ec9")).rows[0].bottle == ONE


@pytest.mark.parametrize(
    "head",
    [
        "Bottle;Lab No.;Metal;Result;Units;MDL;RL;Analysis method;Analysis date",
        "BOTTLE CODE\tLAB_NUMBER\tParameter\tLevel\tUNIT\tlod\tloq\tMethod\tAnalyzed-At",
        '"Code","Laboratory ID","Analyte","Value","Unit","Detection limit","Reporting limit",'
        '"Method","Analysed on"',
    ],
)
def test_columns_go_by_several_names_and_separators(head):
    mark = next(mark for mark in ";\t," if mark in head)
    assert read(GOOD.replace(",", mark), head=head).rows == read(GOOD).rows


def test_columns_come_in_any_order_and_unknown_ones_are_named():
    found = read("3.2,late,ug/L,lead,W-1", head="value,remark,unit,analyte,lab no")
    assert found.rows[0].bottle == ONE
    assert ("column-left-out", "remark") in {(note.kind, note.value) for note in found.notes}
    assert [note.value for note in found.notes if note.kind == "column-absent"] == [
        "detection",
        "reporting",
        "method",
        "analysed_at",
    ]


def test_a_decimal_comma_is_read_where_commas_do_not_separate():
    text = GOOD.replace(",", ";").replace("3.2", "3,2").replace("0.3", "0,3")
    (one,) = read(text, head=HEAD.replace(",", ";")).rows
    assert (one.value, one.detection) == ("3.2", "0.3")
    assert faults(text.replace("3,2", "1,234"), head=HEAD.replace(",", ";")) == [
        (2, "value", "value-thousands")
    ]


def test_a_byte_order_mark_is_no_part_of_the_first_column():
    assert read(GOOD, encoding="utf-8-sig").rows == read(GOOD).rows


def test_a_file_of_an_old_windows_is_read_with_a_note():
    found = read(row(unit="µg/L"), encoding="cp1252")
    assert found.rows[0].unit == "ug/L"
    assert [note.kind for note in found.notes] == ["not-utf-8"]


def test_empty_rows_are_skipped_and_rows_keep_their_number():
    found = read("", GOOD, ",,,,,,,,", row(analyte="copper"), "", "")
    assert [one.row for one in found.rows] == [3, 5]


def test_a_row_with_a_line_end_in_a_cell_counts_as_one():
    found = read(row(method='"EPA\n200.8"'), row(analyte="copper"))
    assert [(one.row, one.method) for one in found.rows] == [(2, "EPA 200.8"), (3, "EPA 200.8")]


def test_the_same_row_twice_is_read_once():
    found = read(GOOD, row(value="0.0032", unit="mg/L", detection="", reporting=""))
    assert [one.row for one in found.rows] == [2]
    assert [note.kind for note in found.notes] == ["row-again"]


def test_two_levels_of_one_bottle_and_analyte_are_refused():
    assert faults(GOOD, row(value="3.3")) == [(3, "value", "row-differs")]
    assert faults(GOOD, row(value="<3.2")) == [(3, "value", "row-differs")]


def test_a_second_header_is_no_row():
    assert faults(GOOD, HEAD, row(analyte="copper")) == [(3, "", "header-again")]


@pytest.mark.parametrize(
    ("head", "kinds"),
    [
        ("bottle,analyte,value", {"no-column"}),
        ("analyte,value,unit", {"no-bottle-column"}),
        ("bottle,code,analyte,value,unit", {"column-twice"}),
        ("bottle,analyte,value,result,unit", {"column-twice"}),
        ("bottle", {"no-column"}),
        ("a,b,c", {"no-header"}),
        (GOOD, {"no-header"}),
    ],
)
def test_a_table_without_its_columns_is_refused(head, kinds):
    assert {kind for _, _, kind in faults(GOOD, head=head)} == kinds


def test_every_missing_column_is_named():
    assert len(faults(GOOD, head="method")) == 4


def test_a_header_alone_is_no_result():
    assert faults() == [(0, "", "no-rows")]


def test_a_cell_beyond_the_last_column_is_refused():
    assert faults(GOOD + ",and more") == [(2, "", "extra-cell")]


def test_a_row_cut_short_lacks_what_it_needs():
    assert {column for _, column, _ in faults(f"{ONE},W-1,lead")} == {"value", "unit"}


@pytest.mark.parametrize(
    ("data", "kind"),
    [
        (b"", "empty"),
        (b"\r\n  \r\n", "empty"),
        (b",", "empty"),
        (b";;\n\xa0;", "empty"),
        (b"PK\x03\x04rest", "not-a-table"),
        (b"%PDF-1.7", "not-a-table"),
        (HEAD.encode("utf-16"), "not-a-table"),
        (HEAD.encode() + b"\n\0", "not-a-table"),
        (HEAD.encode() + b"\n\x81\x8d", "encoding"),
        (HEAD.encode() + b'\n"open,1', "not-a-row"),
        (HEAD.encode() + b'\n"a"b,1', "not-a-row"),
        (b"x" * 5_000_001, "too-large"),
    ],
)
def test_what_is_no_table_of_results_is_refused(data, kind):
    with pytest.raises(BadFile) as bad:
        read_results(data, NAME, resolve=known)
    assert [fault.kind for fault in bad.value.faults] == [kind]
    assert_whole(bad.value.faults[0])


CELL = st.text(max_size=12) | st.sampled_from(["=1", "<", "ND", "1,2", "0", "-", "lead", ONE, '"'])


@given(st.lists(st.lists(CELL, max_size=11), max_size=4))
def test_junk_in_the_rows_is_refused_in_words(rows):
    table = io.StringIO()
    csv.writer(table).writerows([HEAD.split(","), *rows])
    data = table.getvalue().encode("utf-8", "surrogatepass")
    try:
        found = read_results(data, NAME, resolve=known)
    except BadFile as bad:
        for fault in bad.faults:
            assert_whole(fault)
    else:
        assert all(one.bottle in (ONE, TWO) for one in found.rows)


@given(st.binary(max_size=300))
def test_bytes_of_any_kind_are_refused_in_words(data):
    with pytest.raises(BadFile):
        read_results(data, NAME, resolve=known)
