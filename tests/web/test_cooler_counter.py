"""A cooler at the counter's pages: said as seen first, then shown; cards; what is missing."""

import pytest

from fieldapp.domain.cards import text_of
from tests.counter import Node
from tests.web.reader import Reader, words

PAGE, RECEIVE, OPEN, WHICH = "/bench/", "/bench/receive", "/bench/open", "/bench/which"
IN_COOLER = "/bench/?cooler=C-AAAAAA"
EXPECTED = ("88 214", "88 219", "2 packed", "of 2", "2 bottles")


@pytest.fixture
def packed(node: Node) -> Node:
    """Two coolers on the road: two bottles under seal 88 214, one under 88 219."""
    for visit in ("Q-0401", "Q-0402", "Q-0403"):
        node.fill(visit)
    node.pack("C-AAAAAA", "3", ("Q-0401", "Q-0402"), seals=("88 214",))
    node.pack("C-BBBBBB", "2", ("Q-0403",), seals=("88 219",))
    return node


def open_it(reader: Reader, **seen: str) -> str:
    return reader.land(OPEN, OPEN, **{"seals": "88214", "whole": "whole", "count": "2", **seen})


def receipts(node: Node) -> int:
    with node.pages() as pages:
        return pages.count("SELECT COUNT(*) FROM p_fact WHERE kind = 'bottle.received'")


@pytest.mark.parametrize("path", [PAGE, OPEN, f"{WHICH}?seals=1&whole=whole&count=9"])
def test_nothing_expected_is_shown_before_the_cooler_was_said_as_seen(packed, reader, path):
    page = words(reader.read(path))
    for expected in EXPECTED:
        assert expected not in page


def test_a_cooler_that_agrees_says_so_and_names_box_and_day(packed, reader):
    page = words(open_it(reader))
    assert "Cooler 3, Tuesday" in page
    assert "Seal 88214, whole. It agrees." in page
    assert "2 counted, 2 packed. It agrees." in page
    assert "0 of 2 in" in page


def test_another_seal_asks_which_cooler_and_then_shows_both_numbers(packed, reader):
    page = open_it(reader, seals="88 999", count="3")
    assert "Which cooler is it?" in page
    page = words(reader.land(f"{WHICH}?seals=88+999&whole=whole&count=3", OPEN, cooler="C-AAAAAA"))
    assert "Seal 88 999, whole. Put on was 88 214. The Desk sees it." in page
    assert "3 counted, 2 packed. The Desk sees it." in page


def test_two_seals_and_a_broken_one_are_said_as_they_are(packed, reader):
    page = words(open_it(reader, seals="88 214, 88 215", whole="broken"))
    assert "Seal 88 214, 88 215, broken. Put on was 88 214." in page


def test_a_cooler_without_our_record_is_open_and_its_bottles_come_in(packed, reader):
    page = reader.land(f"{WHICH}?seals=A1&whole=whole&count=1", OPEN, cooler="no-record")
    assert "Cooler without our record" in words(page)
    assert "No record of this cooler is here" in words(page)


def test_a_scan_counts_in_its_cooler_and_a_second_says_already_in_of_how_many(packed, reader):
    open_it(reader)
    code = packed.codes["Q-0401"]
    assert "1 of 2 in" in words(reader.land(IN_COOLER, RECEIVE, bottle=code))
    again = words(reader.land(IN_COOLER, RECEIVE, bottle=code))
    assert "In already 1 of 2" in again
    assert receipts(packed) == 1


def test_a_bottle_of_a_cooler_on_the_road_stops_with_the_ways_on(packed, reader):
    open_it(reader)
    answer = reader.send(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0403"])
    page = words(answer.text)
    assert answer.status_code == 422
    assert "It belongs to Cooler 2, Tuesday, still on the road. Nothing was recorded." in page
    assert "Keep it here, with the note" in page
    assert "Set it aside" in page
    assert receipts(packed) == 0


@pytest.mark.parametrize(
    ("arrived", "says"),
    [("keep", "Kept here with your note"), ("aside", "Its record names another cooler.")],
)
def test_either_way_records_it_in_this_cooler(packed, reader, arrived, says):
    open_it(reader)
    page = reader.land(
        IN_COOLER, RECEIVE, bottle=packed.codes["Q-0403"], arrived=arrived, reason="same van"
    )
    assert says in words(page)
    assert "1 of another cooler" in words(page)


def test_to_keep_it_here_without_a_note_stops(packed, reader):
    open_it(reader)
    answer = reader.send(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0403"], arrived="keep")
    assert answer.status_code == 422
    assert "Say why in a few words" in answer.text
    assert receipts(packed) == 0


def test_finishing_names_what_is_missing_and_then_that_all_is_in(packed, reader):
    open_it(reader)
    reader.land(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0401"])
    page = words(reader.read(f"{IN_COOLER}&finish=1"))
    assert "1 missing" in page
    assert "Q-0402" in page
    assert "2 were counted at the opening, 1 are in." in page
    reader.land(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0402"])
    assert "All in" in words(reader.read(f"{IN_COOLER}&finish=1"))


def test_an_opening_is_taken_back_and_the_cooler_is_on_the_road_again(packed, reader):
    open_it(reader, count="20")
    page = words(reader.land(IN_COOLER, "/bench/take-back"))
    assert "Taken back" in page
    assert "Still on the road" in page


@pytest.mark.parametrize(
    ("card", "says"),
    [("leak", "It leaks"), ("low", "Too little water"), ("label", "Its label cannot be read"),
     ("cracked", "It is cracked"), ("no record", "No record came with it"),
     ("hold", "Set aside by the clerk")],
)  # fmt: skip
def test_a_card_before_its_bottle_holds_it_and_nothing_waits_after(packed, reader, card, says):
    open_it(reader)
    page = reader.land(IN_COOLER, RECEIVE, bottle=text_of(card))
    assert says in page
    assert receipts(packed) == 0
    held = reader.go_on(page, RECEIVE, bottle=packed.codes["Q-0401"])
    assert "told--hold" in held
    assert says in words(held)
    assert 'name="cards" value=""' in held


def test_two_cards_are_both_recorded_on_the_next_bottle(packed, reader):
    fields = {**reader.hidden(PAGE, RECEIVE), "cards": "leaks low"}
    reader.client.post(RECEIVE, data={**fields, "bottle": packed.codes["Q-0401"],
                                      "arrived": "aside"})  # fmt: skip
    with packed.pages() as pages:
        fact = pages.story(f"bottle:{packed.codes['Q-0401']}")[-1].fact
    assert fact.checks == {"tight": "leaks", "volume": "low", "cooler": "cooler"}


def test_undo_takes_a_waiting_card_back_before_any_receipt(packed, reader):
    open_it(reader)
    reader.land(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0401"])
    fields = {**reader.hidden(IN_COOLER, RECEIVE), "cards": "leaks", "bottle": text_of("undo")}
    page = reader.client.post(RECEIVE, data=fields).text
    assert "No card waits" in words(page)
    assert 'name="cards" value=""' in page
    assert packed.bottle("Q-0401")["outcome"] == "accepted"


def test_after_an_undo_nothing_more_is_offered_to_take_back(packed, reader):
    open_it(reader)
    reader.land(IN_COOLER, RECEIVE, bottle=packed.codes["Q-0401"])
    assert 'class="undo"' in reader.read(IN_COOLER)
    assert 'class="undo"' not in reader.land(IN_COOLER, RECEIVE, bottle=text_of("undo"))


def test_undo_takes_the_last_receipt_back_once(packed, reader):
    open_it(reader)
    for visit in ("Q-0401", "Q-0402"):
        reader.land(IN_COOLER, RECEIVE, bottle=packed.codes[visit])
    assert "Taken back" in words(reader.land(IN_COOLER, RECEIVE, bottle=text_of("undo")))
    answer = reader.send(IN_COOLER, RECEIVE, bottle=text_of("undo"))
    assert answer.status_code == 422
    assert "Nothing more is taken back" in answer.text
    assert packed.bottle("Q-0402")["outcome"] == ""
    assert packed.bottle("Q-0401")["outcome"] == "accepted"


def test_a_card_needs_no_sticker(packed, reader):
    open_it(reader)
    page = reader.land(
        IN_COOLER, RECEIVE, bottle=text_of("leak"), numbering="sticker", laboratory_number=""
    )
    assert "It leaks" in page


def test_a_torn_card_is_no_bottle_and_no_fault(packed, reader):
    answer = reader.send(PAGE, RECEIVE, bottle="COUNTER SMELLS")
    assert answer.status_code == 422
    assert "begins like a card" in answer.text
    assert receipts(packed) == 0


def test_the_cards_are_a_page_to_print(reader):
    answer = reader.client.get("/bench/cards")
    assert answer.mimetype == "application/pdf"
    assert answer.data.startswith(b"%PDF")
    assert "/bench/cards" in reader.read(PAGE)


def test_a_record_that_comes_late_is_marked_in_the_list(node, reader):
    reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    node.deviate("Q-0401")
    node.fill("Q-0401")
    page = words(reader.read(PAGE))
    assert "set it aside, the Desk decides: The tap was flushed just before the stand" in page


def test_what_the_desk_decided_is_said_at_the_counter(node, reader):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    reader.land(PAGE, RECEIVE, bottle=code, outcome="held", reason="to be asked")
    reader.land(f"/desk/bottles/{code}", f"/desk/bottles/{code}/decide", analyse="no", reason="r")
    assert "it is not analysed. Keep it apart." in words(reader.land(PAGE, RECEIVE, bottle=code))
