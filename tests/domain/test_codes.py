"""Bottle codes: what is misread, mistyped or swapped is caught before it names a wrong bottle."""

import random
from itertools import combinations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.codes import (
    ALPHABET,
    BadCode,
    check_character,
    grouped,
    new_code,
    normalise,
)
from tests.check_values import named, values

tens = st.text(ALPHABET, min_size=10, max_size=10)
codes = tens.map(lambda ten: ten + check_character(ten))


def some_codes(count):
    pick = random.Random(20310504)
    return [new_code(pick.choice) for _ in range(count)]


def why(text):
    with pytest.raises(BadCode) as caught:
        normalise(text)
    return caught.value.values["why"]


@pytest.mark.parametrize("value", values("codes"), ids=named)
def test_the_check_character_is_the_one_worked_out_elsewhere(value):
    assert check_character(value["ten"]) == value["check"]


@pytest.mark.parametrize("code", some_codes(12))
def test_every_wrong_character_in_every_place_is_caught(code):
    caught = 0
    for place in range(11):
        for wrong in ALPHABET.replace(code[place], ""):
            assert why(code[:place] + wrong + code[place + 1 :]) == "check"
            caught += 1
    assert caught == 11 * 31


@pytest.mark.parametrize("code", some_codes(60))
def test_every_swap_of_two_places_is_caught(code):
    for one, other in combinations(range(11), 2):
        if code[one] != code[other]:
            swapped = list(code)
            swapped[one], swapped[other] = code[other], code[one]
            assert why("".join(swapped)) == "check"


@given(codes, st.integers(0, 10), st.sampled_from(ALPHABET))
def test_any_code_with_one_other_character_is_caught(code, place, wrong):
    changed = code[:place] + wrong + code[place + 1 :]
    if changed == code:
        assert normalise(changed) == code
    else:
        assert why(changed) == "check"


@given(codes, st.integers(0, 10), st.integers(0, 10))
def test_any_code_with_two_places_swapped_is_caught(code, one, other):
    swapped = list(code)
    swapped[one], swapped[other] = code[other], code[one]
    if code[one] == code[other]:
        assert normalise("".join(swapped)) == code
    else:
        assert why("".join(swapped)) == "check"


@given(codes)
def test_a_code_reads_the_same_in_small_letters_groups_and_look_alikes(code):
    typed = grouped(code).lower().replace("0", "o")
    assert normalise(typed) == code
    assert normalise(f" {typed.replace('1', 'l')}\n") == code
    assert normalise(typed.replace("1", "i").replace("-", " ")) == code
    assert normalise(code.replace("1", "I").replace("0", "O")) == code


def test_a_code_is_shown_in_groups_of_four_four_and_three():
    assert grouped("TAPW1TNESSK") == "TAPW-1TNE-SSK"


def test_new_codes_hold_their_own_check_and_differ():
    made = {new_code() for _ in range(200)}
    assert len(made) == 200
    assert all(normalise(code) == code and len(code) == 11 for code in made)


def test_a_new_code_takes_ten_characters_from_its_source():
    letters = iter("TAPW1TNESS")
    assert new_code(lambda alphabet: next(letters)) == "TAPW1TNESSK"


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("", "length"),
        ("TAPW1TNESS", "length"),
        ("TAPW1TNESSKK", "length"),
        ("TAPW1TNESUK", "character"),
        ("TAPW1TNESS\u212a", "character"),  # the Kelvin sign, which lower case makes a k
        ("TAPW\u0131TNESSK", "character"),  # the dotless i, which upper case makes an I
        ("https://tap/", "character"),
        ("TAPW1TNESSJ", "check"),
    ],
)
def test_what_is_no_code_says_what_is_wrong(text, reason):
    assert why(text) == reason


def test_a_character_of_no_code_is_named_with_its_place():
    with pytest.raises(BadCode) as caught:
        normalise("tap-w1tn$ssk")
    assert caught.value.values == {
        "why": "character",
        "code": "tap-w1tn$ssk",
        "character": "$",
        "place": 8,
    }


@pytest.mark.parametrize("ten", ["TAPW1TNES", "TAPW1TNESSK", "TAPW1TNESI"])
def test_only_ten_characters_of_the_alphabet_get_a_check(ten):
    with pytest.raises(BadCode):
        check_character(ten)
