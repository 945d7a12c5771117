"""Bad input of every form: a clear sentence, nothing recorded. A form without a row fails."""

import io
from typing import Any

import pytest

from tests import nodes
from tests.pictures import HEIC, bomb, jpeg, marked, qr
from tests.web.visitor import TOKEN, Visitor, a_visitor, endpoints, rule_of, words_of

TOO_LONG = "x" * 3000
NO_TIME = ({"done_local": "half past six"}, 422, "Type a date and a time")
AHEAD = ({"done_local": "2031-05-04T06:30"}, 422, "lies ahead of this device's clock")
STRANGE_TELLER = ({"told_by": "policeman"}, 422, "told by")
OLD_PAGE = ({"act": None}, 422, "Open it again")


def brought(data: bytes) -> tuple[io.BytesIO, str]:
    """Return a file as a form brings it, good for one request."""
    return io.BytesIO(data), "IMG_0001.JPG"


Row = tuple[dict[str, Any], int, str]

BAD: dict[str, list[Row]] = {
    "people.choose": [
        ({"person": ""}, 422, "person"),
        ({"person": TOO_LONG}, 422, "person"),
        ({"person": None}, 422, "person"),
    ],
    "bench.receive": [
        ({"bottle": ""}, 422, "bottle"),
        ({"bottle": "LABEL"}, 422, "11|characters|code"),
        ({"bottle": "2HB4X90TC7U"}, 422, "code"),
        ({"bottle": "2HB4X90TC7X"}, 422, "changed places"),
        ({"bottle": "00000000000", "outcome": "in"}, 422, "outcome"),
        ({"bottle": "00000000000", "outcome": "refused"}, 422, "reason"),
        ({"bottle": "00000000000", "checks": "smells"}, 422, "checks"),
        ({"bottle": "00000000000", "numbering": "guessed"}, 422, "numbering"),
        ({"bottle": "00000000000", "laboratory_number": TOO_LONG}, 422, "laboratory number"),
        ({"bottle": "00000000000", "reason": TOO_LONG}, 422, "reason"),
        ({"bottle": "COUNTER SMELLS"}, 422, "is none"),
        ({"bottle": "00000000000", "laboratory_number": "COUNTER LEAK"}, 422, "is a card"),
        ({"bottle": "00000000000", "arrived": "perhaps"}, 422, "arrived"),
        ({"bottle": "00000000000", "cooler": TOO_LONG}, 422, "cooler"),
        ({"bottle": "00000000000", "cards": TOO_LONG}, 422, "cards"),
        ({"bottle": "7BCCV19XKXY", **OLD_PAGE[0]}, 422, "Open it again"),
    ],
    "bench.open_cooler": [
        ({"whole": "whole", "seals": "", "count": "17"}, 422, "as you read it"),
        ({"whole": "perhaps", "seals": "88214", "count": "17"}, 422, "whole"),
        ({"whole": None, "seals": "88214", "count": "17"}, 422, "whole"),
        ({"whole": "whole", "seals": "88214", "count": "many"}, 422, "count"),
        ({"whole": "whole", "seals": "88214", "count": "-1"}, 422, "count"),
        ({"whole": "whole", "seals": "88214", "count": "501"}, 422, "count"),
        ({"whole": "whole", "seals": TOO_LONG, "count": "17"}, 422, "seals"),
        ({"whole": "whole", "seals": "88214", "count": "17", "cooler": "C-NONE00"}, 404,
         "does not know"),
        ({"whole": "none", "count": "17", "cooler": "no-record", **OLD_PAGE[0]}, 422,
         "Open it again"),
    ],
    "bench.take_back": [
        ({"entry": ""}, 422, "entry"),
        ({"entry": "x" * 43}, 404, "does not know"),
        ({"entry": None}, 422, "entry"),
    ],
    "crate.pack": [
        ({"box": "3", "code": ""}, 422, "11 characters"),
        ({"box": "3", "code": "2HB4X90TC7X"}, 422, "does not agree"),
        ({"box": TOO_LONG, "code": "00000000000"}, 422, "box"),
        ({"box": "3", "all": "perhaps"}, 422, "all"),
        ({"box": "3", "all": "yes"}, 422, "has its place"),
        ({"box": "3", "code": "00000000000", **NO_TIME[0]}, *NO_TIME[1:]),
        ({"box": "3", "code": "00000000000", **AHEAD[0]}, *AHEAD[1:]),
        ({"box": "3", "code": "00000000000", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "crate.locate": [
        ({"bottle": "00000000000", "how": "lost"}, 422, "where it is"),
        ({"bottle": "00000000000", "how": None}, 422, "how"),
        ({"bottle": None, "how": "broken"}, 422, "bottle"),
        ({"bottle": "2HB4X90TC7X", "how": "broken"}, 422, "does not agree"),
        ({"bottle": "00000000000", "how": "broken", "where": TOO_LONG}, 422, "at most 500"),
    ],
    "crate.count_door": [
        ({"count": "many"}, 422, "whole number"),
        ({"count": "-1"}, 422, "how many"),
        ({"count": "501"}, 422, "how many"),
        ({"count": None}, 422, "how many"),
        ({"count": "1", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "crate.seal": [
        ({"count": "1", "seal_1": "  "}, 422, "number on the seal"),
        ({"count": "many", "seal_1": "88 214"}, 422, "count"),
        ({"count": None, "seal_1": "88 214"}, 422, "count"),
        ({"count": "9", "seal_1": "88 214"}, 422, "Counted: 9"),
        ({"count": "1", "seal_1": "88 214", **NO_TIME[0]}, *NO_TIME[1:]),
        ({"count": "1", "seal_1": "88 214", **AHEAD[0]}, *AHEAD[1:]),
    ],
    "crate.reopen": [
        ({"reason": "one more"}, 422, "bears no seal"),
        ({"reason": TOO_LONG}, 422, "at most 500"),
    ],
    "crate.relinquish": [
        ({"to": "the moon"}, 422, "who takes it"),
        ({"to": None}, 422, "to"),
        ({"to": "laboratory"}, 422, "bears no seal"),
        ({"to": "courier", "waybill": TOO_LONG}, 422, "waybill"),
        ({"to": "courier", "name": TOO_LONG}, 422, "name"),
    ],
    "crate.take_back": [
        ({"of": "x"}, 422, "of"),
        ({"of": "x" * 43}, 404, "does not know"),
    ],
    "coolers.state_receipt": [
        ({"on": "soon", "name": "A"}, 422, "Type the day"),
        ({"on": None, "name": "A"}, 422, "on"),
        ({"on": "2027-05-04", "at": "noon", "name": "A"}, 422, "Type a time"),
        ({"on": "2027-05-04", "name": " "}, 422, "Type the name"),
        ({"on": "2027-05-04", "name": "A"}, 422, "at least one bottle"),
        ({"on": "2027-05-04", "name": TOO_LONG}, 422, "name"),
        ({"on": "2027-05-04", "name": "A", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "coolers.take_back": [
        ({"of": "x"}, 422, "of"),
        ({"of": "x" * 43}, 404, "does not know"),
    ],
    "desk.decide": [
        ({"analyse": "perhaps", "reason": "r"}, 422, "analyse"),
        ({"analyse": "yes", "reason": TOO_LONG}, 422, "reason"),
        ({"analyse": "yes", "reason": "r"}, 422, "not held"),
        ({"analyse": None}, 422, "analyse"),
    ],
    "desk.void": [
        ({"why": "bored"}, 422, "why"),
        ({"why": None}, 422, "why"),
        ({"why": "broken", **OLD_PAGE[0]}, 422, "Open it again"),
    ],
    "desk.settle": [
        ({"reason": ""}, 422, "reason"),
        ({"reason": "   "}, 422, "reason"),
        ({"reason": TOO_LONG}, 422, "reason"),
    ],
    "kitchen.open_visit": [NO_TIME, STRANGE_TELLER],
    "kitchen.resume_visit": [NO_TIME, STRANGE_TELLER],
    "kitchen.leave_visit": [
        ({"why": "bored"}, 422, "Choose a reason"),
        ({"why": None}, 422, "why"),
        ({"why": "other", "reason": TOO_LONG}, 422, "at most 500"),
        ({"why": "other", **NO_TIME[0]}, *NO_TIME[1:]),
        ({"why": "other", **AHEAD[0]}, *AHEAD[1:]),
        ({"why": "other", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "kitchen.answer": [
        ({"question": "consent", "answer": "perhaps"}, 422, "no answer|Choose one"),
        ({"question": "consent", "answer": ""}, 422, "answer"),
        ({"question": None, "answer": "agreed"}, 422, "question"),
        ({"question": "consent", "answer": "agreed", "note": TOO_LONG}, 422, "at most 500"),
        ({"question": "consent", "answer": "agreed", **NO_TIME[0]}, *NO_TIME[1:]),
        ({"question": "consent", "answer": "agreed", **AHEAD[0]}, *AHEAD[1:]),
    ],
    "kitchen.state_last_use": [
        ({"exact": "surely"}, 422, "how exact"),
        ({"exact": "at", "at": "half past ten"}, 422, "Choose one of the times"),
        ({"exact": "at", "at": "2027-05-04T10:00"}, 422, "Choose one of the times"),
        ({"exact": "at", "at_local": "4 May, 6:30"}, 422, "Type a date and a time"),
        ({"exact": "at"}, 422, "Choose when water last ran"),
        ({"exact": "at", "at_local": "2031-05-04T06:30"}, 422, "lies ahead"),
        ({"exact": "between", "at_local": "2027-05-04T02:00", "to_local": "2027-05-04T01:00"},
         422, "later than the second"),
        ({"exact": "at", "at_local": "2027-03-14T02:30"}, 422, "clocks went forward"),
        ({"exact": "unknown", "where": "next door"}, 422, "where"),
        ({"exact": "unknown", "known_by": "rumour"}, 422, "known by"),
    ],
    "kitchen.set_bottle": [
        ({"code": ""}, 422, "Scan or type"),
        ({"code": None}, 422, "code"),
        ({"code": TOO_LONG}, 422, "Scan or type"),
        ({"code": "2HB4X90TC7X"}, 422, "does not agree"),
        ({"code": "2HB4X90TC7"}, 422, "characters"),
        ({"code": "", "picture": brought(jpeg(marked()))}, 422, "No bottle code can be read"),
        ({"code": "", "picture": brought(b"a text")}, 422, "no picture this device can read"),
    ],
    "kitchen.swap_bottle": [
        ({"draw": "first", "code": "00000000000", "why": "broken"}, 422, "draw"),
        ({"draw": "1", "code": "2HB4X90TC7X", "why": "broken"}, 422, "does not agree"),
        ({"draw": "9", "code": "00000000000", "why": "broken"}, 422, "no draw 9"),
        ({"draw": "1", "code": "00000000000", "why": "ugly"}, 422, "why|Choose"),
    ],
    "kitchen.open_tap": [NO_TIME, STRANGE_TELLER, AHEAD],
    "kitchen.start_stand": [NO_TIME, STRANGE_TELLER, AHEAD],
    "kitchen.run": [NO_TIME, STRANGE_TELLER, AHEAD],
    "kitchen.ran": [
        ({"opened_local": "at six"}, 422, "Type a date and a time"),
        ({"shut_local": "at six"}, 422, "Type a date and a time"),
        ({"fold": "2"}, 422, "first or the second"),
        ({"reason": TOO_LONG}, 422, "at most 500"),
        OLD_PAGE,
    ],
    "kitchen.fill": [
        ({"fill": "full"}, 422, "how full"),
        ({"ml": "a lot"}, 422, "ml"),
        ({"ml": "-5"}, 422, "ml"),
        ({"ml": "200000"}, 422, "ml"),
        NO_TIME,
    ],
    "kitchen.blank": [
        ({"water_lot": TOO_LONG}, 422, "water lot"),
        ({"code": TOO_LONG}, 422, "code"),
        NO_TIME,
    ],
    "kitchen.state_deviation": [
        ({"deviation": "bad-luck"}, 422, "deviation|Choose"),
        ({"deviation": None}, 422, "deviation"),
        ({"deviation": "other", "reason": TOO_LONG}, 422, "at most 500"),
        ({"deviation": "other", **AHEAD[0]}, *AHEAD[1:]),
    ],
    "kitchen.already_done": [
        ({"deviation": "bad-luck", "was_1": "yes"}, 422, "deviation|Choose"),
        ({"deviation": "other"}, 422, "what became of it"),
        ({"deviation": "other", "was_1": "yes", "code_1": "2HB4X90TC7X"}, 422, "does not agree"),
        ({"deviation": "other", "was_1": "yes", "fill_1": "full"}, 422, "how full|Choose"),
        ({"deviation": "other", "was_1": "yes", "reason": TOO_LONG}, 422, "at most 500"),
        ({"deviation": "other", "was_1": "yes", "ml_1": "a lot"}, 422, "millilitres|ml|number"),
    ],
    "kitchen.sign": [
        ({"name": TOO_LONG}, 422, "name"),
        ({"name": "A", "close": "perhaps"}, 422, "close"),
    ],
    "kitchen.close": [
        ({"outcome": "fine"}, 422, "outcome"),
        ({"outcome": "unfit", **AHEAD[0]}, *AHEAD[1:]),
        ({"outcome": "unfit", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "kitchen.take_back": [
        ({"of": "x" * 43}, 404, "does not know"),
        ({"of": None}, 422, "of"),
    ],
    "photos.take": [
        ({}, 422, "No picture came"),
        ({"photo": brought(b"a text")}, 422, "no picture this device can read"),
        ({"photo": brought(HEIC)}, 422, "HEIC"),
        ({"photo": brought(bomb())}, 422, "million pixels"),
        ({"photo": brought(jpeg(marked())[:500])}, 422, "damaged or cut short"),
        ({"photo": brought(jpeg(marked())), "about": "visit:V-0402"}, 422, "A photo here is of"),
        ({"photo": brought(jpeg(marked())), "about": TOO_LONG}, 422, "about"),
        ({"photo": brought(jpeg(marked())), "caption": TOO_LONG}, 422, "at most 500"),
        ({"photo": brought(jpeg(marked())), **NO_TIME[0]}, *NO_TIME[1:]),
        ({"photo": brought(jpeg(marked())), **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "scan.read": [
        ({}, 422, "No picture came"),
        ({"picture": brought(b"a text")}, 422, "no picture this device can read"),
        ({"picture": brought(jpeg(marked()))}, 422, "No bottle code can be read"),
        ({"picture": brought(jpeg(qr("SHELF 7")))}, 422, "is of no bottle"),
        ({"picture": brought(jpeg(qr("2HB4X90TC7T"))), "token": None}, 400, "Open it again"),
    ],
    "story.correct": [
        ({"reason": ""}, 422, "why it is corrected"),
        ({"reason": TOO_LONG}, 422, "at most 500"),
        ({"reason": "r"}, 422, "Nothing here differs"),
        ({"reason": "r", **NO_TIME[0]}, *NO_TIME[1:]),
        ({"reason": "r", **AHEAD[0]}, *AHEAD[1:]),
        ({"reason": "r", "fold": "2"}, 422, "first or the second"),
        ({"reason": "r", "done_local": "2027-05-04T05:00", **OLD_PAGE[0]}, *OLD_PAGE[1:]),
    ],
    "state.send": [({"token": None}, 400, "Open it again")],
}  # fmt: skip
"""What is sent, the code of the answer, and a word of its sentence (``|`` parts what will do)."""

NEAR_MACHINES = {"work.hand_in", "replication.door"}
"""Tested below: programs send there, and no form."""

FORMS = [name for name in endpoints("POST") if name not in NEAR_MACHINES]
ROWS = [(endpoint, *row) for endpoint, rows in BAD.items() for row in rows]


@pytest.fixture(scope="module")
def visitor(tmp_path_factory):
    """Give a browser at a node where a visit has begun; what is refused leaves it as it is."""
    with a_visitor(tmp_path_factory.mktemp("bad")) as made:
        yield made


def test_every_form_has_a_row_here():
    assert sorted(BAD) == FORMS
    assert set(endpoints("POST")) == set(FORMS) | NEAR_MACHINES


@pytest.mark.parametrize(
    ("endpoint", "fields", "code", "says"),
    ROWS,
    ids=[f"{endpoint}-{n}" for n, (endpoint, *_) in enumerate(ROWS)],
)
def test_bad_input_gets_a_sentence_and_records_nothing(visitor, endpoint, fields, code, says):
    before = nodes.everything(visitor.store)
    path = visitor.path(rule_of(visitor, endpoint, "POST"))
    answer = visitor.send(path, **fields)
    told = words_of(answer.text)
    assert answer.status_code == code, (answer.location, told)
    assert any(word.casefold() in told.casefold() for word in says.split("|")), told
    assert nodes.everything(visitor.store) == before


@pytest.mark.parametrize("endpoint", [e for e in FORMS if e.startswith("kitchen.")])
def test_a_visit_that_nobody_planned_is_not_found(visitor, endpoint):
    good = {
        "why": "other", "question": "consent", "answer": "agreed", "exact": "unknown",
        "code": "00000000000", "draw": "1", "deviation": "other", "was_1": "yes", "name": "A",
        "of": "x" * 43,
    }  # fmt: skip
    path = visitor.path(rule_of(visitor, endpoint, "POST")).replace("V-0401", "V-9999")
    before = nodes.everything(visitor.store)
    answer = visitor.send(path, **good)
    assert answer.status_code == 404
    assert "does not know" in words_of(answer.text)
    assert nodes.everything(visitor.store) == before


@pytest.mark.parametrize(
    "path",
    [
        "/desk/bottles/7BCCV19XKX0/decide",
        "/desk/bottles/nonsense/decide",
        "/desk/findings/x/settle",
    ],
)
def test_a_decision_on_what_nobody_knows_is_refused(visitor, path):
    before = nodes.everything(visitor.store)
    answer = visitor.send(path, analyse="yes", reason="r")
    assert answer.status_code in (404, 422)
    assert words_of(answer.text)
    assert nodes.everything(visitor.store) == before


def test_nobody_of_an_unknown_name_is_chosen(visitor):
    answer = visitor.send("/person", person="sampler-9")
    assert answer.status_code == 303
    assert "Nobody of that name is listed" in words_of(visitor.get(answer.location).text)
    with visitor.client.session_transaction() as kept:
        assert kept["person"] == nodes.SAMPLER


def test_a_press_by_nobody_leads_to_the_first_page(planned):
    visitor = Visitor(planned)
    with visitor.client.session_transaction() as kept:
        del kept["person"]
    before = nodes.everything(planned)
    answer = visitor.send("/kitchen/visits/V-0402/open")
    assert answer.status_code == 303
    assert answer.location.startswith("/?then=")
    assert nodes.everything(planned) == before


def test_sending_before_enrolment_says_what_to_do(visitor):
    before = nodes.everything(visitor.store)
    answer = visitor.send("/state/send")
    assert answer.status_code == 303
    assert "enrolled nowhere" in words_of(visitor.get(answer.location).text)
    assert nodes.everything(visitor.store) == before


BAD_WORK = {
    "no JSON": (b"{", 400),
    "another kind of text": (b"route=R-0504", 400),
}


@pytest.mark.parametrize("what", BAD_WORK)
def test_work_that_cannot_be_read_is_refused(visitor, what):
    body, code = BAD_WORK[what]
    before = nodes.everything(visitor.store)
    answer = visitor.client.post(
        "/work/labels", data=body,
        headers={"Authorization": f"Bearer {TOKEN}", "Content-Type": "application/json"},
    )  # fmt: skip
    assert answer.status_code == code
    assert nodes.everything(visitor.store) == before


def test_work_that_nobody_knows_is_not_found(visitor):
    answer = visitor.client.post(
        "/work/polish", json={}, headers={"Authorization": f"Bearer {TOKEN}"}
    )
    assert answer.status_code == 404


@pytest.mark.parametrize("asked", [{"route": "R-9999"}, {"route": 7}, {"colour": "red"}, {}, []])
def test_work_that_cannot_be_done_is_told_as_a_fault_and_records_nothing(visitor, asked):
    before = nodes.everything(visitor.store)
    answer = visitor.client.post(
        "/work/labels", json=asked, headers={"Authorization": f"Bearer {TOKEN}"}
    )
    assert answer.status_code in (200, 400)
    if answer.status_code == 200:
        assert '"fault"' in answer.text.splitlines()[-1]
    assert nodes.everything(visitor.store) == before
