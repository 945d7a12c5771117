"""The counter's page: plain forms first, the queue's script on the same answers."""

import pytest

from fieldapp.domain import codes
from fieldapp.domain.codes import grouped
from tests.counter import Node
from tests.web.reader import Reader, words

PAGE, RECEIVE = "/bench/", "/bench/receive"


def receipts(node: Node) -> int:
    with node.pages() as pages:
        return pages.count("SELECT COUNT(*) FROM p_fact WHERE kind = 'bottle.received'")


def wrong(code: str) -> str:
    return code[:-1] + ("0" if code[-1] != "0" else "1")


def test_an_empty_counter_says_what_to_do(reader):
    assert "Nothing was received yet today" in reader.read(PAGE)


def test_a_plain_post_lands_on_in_with_the_number_and_the_next_one_counted_up(node, reader):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    page = reader.land(PAGE, RECEIVE, bottle=code, laboratory_number="26-0418")
    assert 'class="told told--in"' in page
    assert f"{grouped(code)} your 26-0418 Q-0401 · first litre" in words(page)
    assert 'value="26-0419"' in page
    assert "1 in · 0 held · 0 refused" in words(page)


def test_the_same_press_twice_is_one_receipt(node, reader):
    node.fill("Q-0401")
    fields = {**reader.hidden(PAGE, RECEIVE), "bottle": node.codes["Q-0401"]}
    first, second = (reader.client.post(RECEIVE, data=fields) for _ in range(2))
    assert first.location == second.location
    assert receipts(node) == 1


def test_a_second_scan_says_in_already(node, reader):
    node.fill("Q-0401")
    reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    page = reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    assert "In already" in page
    assert "Nothing is recorded twice" in page
    assert receipts(node) == 1


def test_a_bottle_of_an_unheard_tablet_is_in_and_says_when_it_was_last_heard(node, reader):
    page = reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0402"])
    assert "nothing is heard of it yet" in page
    node.fill("Q-0401")
    page = reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0403"])
    assert "has not arrived (last heard 06:00)" in page


def test_a_deviation_is_before_the_clerk_s_eyes_with_its_direction(node, reader):
    node.deviate("Q-0401")
    node.fill("Q-0401")
    page = reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    assert 'class="told told--hold"' in page
    assert "The tap was flushed just before the stand (bends the result low)" in page
    assert "The Desk decides before it is analysed" in page


def test_a_right_code_without_a_record_is_held(node, reader):
    page = reader.land(PAGE, RECEIVE, bottle=codes.new_code())
    assert "no record of it is here" in page


@pytest.mark.parametrize(
    ("typed", "says"),
    [
        ("check", "One character is wrong"),
        ("ABC", "That has 3 characters; a code has 11"),
        ("F8QY40YGE*9", "“*” stands in no code"),
    ],
)
def test_what_is_no_code_stops_on_the_counter_itself_and_records_nothing(node, reader, typed, says):
    answer = reader.send(
        PAGE, RECEIVE, bottle=wrong(node.codes["Q-0401"]) if typed == "check" else typed
    )
    page = answer.get_data(as_text=True)
    assert answer.status_code == 422
    assert 'class="told told--stop"' in page
    assert says in page
    assert "data-counter" in page
    assert receipts(node) == 0


def test_to_refuse_without_a_reason_stops_and_keeps_what_was_typed(node, reader):
    answer = reader.send(PAGE, RECEIVE, bottle=node.codes["Q-0401"], outcome="refused")
    page = answer.get_data(as_text=True)
    assert answer.status_code == 422
    assert "Say why" in page
    assert node.codes["Q-0401"] in page
    assert receipts(node) == 0


def test_a_refusal_is_shown_with_what_was_seen(node, reader):
    page = reader.land(
        PAGE, RECEIVE, bottle=node.codes["Q-0401"], outcome="refused", checks="leaks"
    )
    assert 'class="told told--stop"' in page
    assert "It leaks" in page
    assert "0 in · 0 held · 1 refused" in words(page)


def test_a_number_on_another_bottle_stops(node, reader):
    node.fill("Q-0401")
    reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"], laboratory_number="26-1")
    answer = reader.send(PAGE, RECEIVE, bottle=node.codes["Q-0402"], laboratory_number="26-1")
    assert answer.status_code == 422
    assert grouped(node.codes["Q-0401"]) in answer.get_data(as_text=True)
    assert receipts(node) == 1


def test_with_stickers_nothing_is_recorded_before_the_number_is_scanned(node, reader):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    answer = reader.send(PAGE, RECEIVE, bottle=code, numbering="sticker", laboratory_number="")
    page = answer.get_data(as_text=True)
    assert "Now scan your own sticker" in page
    assert f'value="{code}"' in page
    assert receipts(node) == 0
    page = reader.land(PAGE, RECEIVE, bottle=code, numbering="sticker", laboratory_number="ST-77")
    assert "your ST-77" in page


def test_the_last_receipt_is_taken_back_with_one_press(node, reader):
    node.fill("Q-0401")
    reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    page = reader.land(PAGE, "/bench/take-back")
    assert "Taken back" in page
    assert "0 in · 0 held · 0 refused" in words(page)
    assert node.bottle("Q-0401")["outcome"] == ""


@pytest.mark.parametrize(
    "bad",
    [
        {"bottle": ""},
        {"outcome": "perhaps"},
        {"checks": "smells"},
        {"numbering": "guessed"},
        {"laboratory_number": "9" * 41},
        {"reason": "x" * 501},
        {"bottle": "9" * 61},
    ],
)
def test_bad_fields_are_answered_with_a_sentence_and_record_nothing(node, reader, bad):
    answer = reader.send(PAGE, RECEIVE, **{"bottle": node.codes["Q-0401"], **bad})
    assert answer.status_code == 422
    assert receipts(node) == 0


def test_nobody_receives_without_a_name(node):
    nameless = Reader(node, person="")
    answer = nameless.send(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    assert answer.status_code == 303
    assert answer.location.startswith("/?then=")
    assert receipts(node) == 0


def test_the_queue_gets_the_same_answer_as_parts_of_the_page_and_a_new_act(node, reader):
    node.fill("Q-0401")
    fields = {**reader.hidden(PAGE, RECEIVE), "bottle": node.codes["Q-0401"],
              "laboratory_number": "26-0418"}  # fmt: skip
    answer = reader.client.post(
        RECEIVE, data=fields, headers={"Accept": "application/json"}, follow_redirects=True
    )
    told = answer.get_json()
    assert (told["word"], told["why"], told["number"]) == ("in", "in", "26-0419")
    assert told["act"] != fields["act"]
    assert "told--in" in told["answer"]
    assert node.codes["Q-0401"][:4] in told["received"]


def test_the_queue_is_told_to_stop_in_the_same_words(node, reader):
    fields = {**reader.hidden(PAGE, RECEIVE), "bottle": wrong(node.codes["Q-0401"])}
    answer = reader.client.post(RECEIVE, data=fields, headers={"Accept": "application/json"})
    assert answer.status_code == 422
    assert answer.get_json()["word"] == "stop"
    assert "Nothing was recorded" in answer.get_json()["answer"]


def test_a_bottle_asked_for_that_is_not_received_is_no_in(node, reader):
    page = reader.read(f"{PAGE}?bottle={node.codes['Q-0401']}")
    assert "told--in" not in page
    assert "This bottle is not received" in page


def test_the_counter_shows_no_name_of_a_resident_or_sampler(node, reader):
    node.fill("Q-0401")
    page = reader.land(PAGE, RECEIVE, bottle=node.codes["Q-0401"])
    assert "Imaginary Resident" not in page
    assert "Imaginary Sampler" not in page
