"""The counter's cards: never a bottle, never a number, read however a scanner types them."""

import pytest

from fieldapp.domain.cards import CARDS, is_card, read_card, text_of
from fieldapp.domain.codes import BadCode, new_code, normalise


@pytest.mark.parametrize("card", CARDS)
def test_a_card_is_read_back_from_its_own_text(card):
    assert read_card(text_of(card)) == card


@pytest.mark.parametrize("card", CARDS)
def test_no_card_and_no_torn_piece_of_one_is_ever_a_bottle_code(card):
    text = text_of(card)
    pieces = [text[:end] for end in range(7, len(text) + 1)]
    for piece in pieces:
        with pytest.raises(BadCode):
            normalise(piece)


@pytest.mark.parametrize(
    "typed", ["counter no record", " COUNTER  NO RECORD ", "cOUNTER nO rECORD"]
)
def test_a_card_is_read_whatever_the_shift_key_does(typed):
    assert read_card(typed) == "no record"


@pytest.mark.parametrize("typed", ["COUNTER", "COUNTER SMELLS", "LEAK", "COUNTERLEAK", ""])
def test_what_only_looks_like_a_card_is_none(typed):
    assert read_card(typed) == ""


def test_what_begins_like_a_card_is_told_from_bottles_and_numbers():
    assert is_card("COUNTER SMELLS")
    assert not is_card("26-0418")
    assert not any(is_card(new_code()) for _ in range(200))
