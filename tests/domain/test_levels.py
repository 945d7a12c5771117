"""Levels as laboratories write them: one text, one meaning, or a refusal that says why."""

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.levels import BadLevel, Level, read_level, read_unit


@pytest.mark.parametrize(
    ("text", "unit", "micrograms", "qualifier"),
    [
        ("12.3", "ug/L", "12.3", ""),
        ("12,3", "ug/L", "12.3", ""),
        (" 12.3 ", "\u00b5g/L", "12.3", ""),
        ("12.3", "\u03bcg/l", "12.3", ""),
        ("0.0123", "mg/L", "12.3", ""),
        ("0,005", "mg/L", "5", ""),
        ("1234,567", "ppb", "1234.567", ""),
        (".015", "MG/L", "15", ""),
        ("1.5E-02", "mg/L", "15", ""),
        ("0", "mg/L", "0", ""),
        ("<2", "ug/L", "2", "<"),
        ("< 0.002", "mg/L", "2", "<"),
        ("<0,5", " ppb ", "0.5", "<"),
    ],
)
def test_a_level_is_read_in_micrograms_a_litre(text, unit, micrograms, qualifier):
    assert read_level(text, unit) == Level(Decimal(micrograms), qualifier)


@pytest.mark.parametrize("text", ["ND", "nd", " N.D. "])
def test_not_detected_has_no_value(text):
    level = read_level(text, "mg/L", detection="0.0005", reporting="0.002")
    assert level == Level(None, "ND", Decimal("0.5"), Decimal(2))


@pytest.mark.parametrize("limits", [(None, None), ("", "  ")])
def test_limits_may_be_left_blank(limits):
    level = read_level("3", "ug/L", detection=limits[0], reporting=limits[1])
    assert (level.detection, level.reporting) == (None, None)


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("", "blank"),
        ("   ", "blank"),
        ("<", "blank"),
        ("-0.5", "negative"),
        ("\u22120.5", "negative"),
        ("<-2", "negative"),
        ("1,234", "thousands"),
        ("12,345", "thousands"),
        ("1,234.5", "thousands"),
        ("1,234,567", "thousands"),
        ("<1,000", "thousands"),
        (">200", "above"),
        ("<0", "zero-limit"),
        ("NaN", "number"),
        ("inf", "number"),
        ("1.2.3", "number"),
        ("1 234", "number"),
        ("3 ug/L", "number"),
        ("\u0663", "number"),
        ("trace", "number"),
        ("5.", "number"),
        ("1E999", "number"),
        ("0." + "1" * 13, "number"),
    ],
)
def test_what_could_mean_nothing_or_two_things_is_refused(text, reason):
    with pytest.raises(BadLevel) as caught:
        read_level(text, "ug/L")
    assert caught.value.values["why"] == reason
    assert caught.value.values["value"] == text


@pytest.mark.parametrize("unit", ["", "ng/L", "g/L", "ppm", "%"])
def test_a_unit_nobody_named_is_refused_with_those_that_are_known(unit):
    with pytest.raises(BadLevel) as caught:
        read_unit(unit)
    assert caught.value.values["why"] == "unit"
    assert "mg/L" in caught.value.values["known"]


@pytest.mark.parametrize(
    ("detection", "reporting", "reason"),
    [("2", "1", "limits"), ("0", "1", "zero-limit"), ("x", "1", "number"), ("-1", "", "negative")],
)
def test_limits_that_cannot_be_are_refused(detection, reporting, reason):
    with pytest.raises(BadLevel) as caught:
        read_level("3", "ug/L", detection=detection, reporting=reporting)
    assert caught.value.values["why"] == reason


@pytest.mark.parametrize(
    ("value", "qualifier"),
    [
        (None, ""),
        (None, "<"),
        (Decimal(1), "ND"),
        (Decimal("NaN"), ""),
        (Decimal("Infinity"), ""),
        (Decimal(-1), ""),
    ],
)
def test_a_level_cannot_be_built_that_no_report_could_mean(value, qualifier):
    with pytest.raises(BadLevel):
        Level(value, qualifier)


@given(st.decimals(0, 100000, places=4))
def test_milligrams_and_micrograms_of_one_level_agree_exactly(level):
    in_milligrams = f"{level / 1000:f}"
    assert read_level(in_milligrams, "mg/L") == read_level(f"{level:f}", "ug/L")


@given(st.text(max_size=12), st.sampled_from(["ug/L", "mg/L"]))
def test_no_text_does_worse_than_a_refusal(text, unit):
    try:
        level = read_level(text, unit)
    except BadLevel:
        return
    assert level.value is None or level.value >= 0
