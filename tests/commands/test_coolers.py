"""A cooler at the counter: opened as seen, its bottles told from another's, faults by cards."""

import pytest

from fieldapp.commands import bench, coolers, told
from fieldapp.domain.errors import Unknown
from fieldapp.domain.facts import BottleReceived
from fieldapp.projections import arrivals
from tests.counter import Node

THREE = ("Q-0401", "Q-0402", "Q-0403")


@pytest.fixture
def packed(node: Node) -> Node:
    """Two coolers on the road: two bottles under seal 88 214, one under 88 219."""
    for visit in THREE:
        node.fill(visit)
    node.pack("C-AAAAAA", "3", THREE[:2], seals=("88 214",))
    node.pack("C-BBBBBB", "2", THREE[2:], seals=("88 219",))
    return node


def opened(node: Node, *seals: str, whole: bool = True, count: int = 2, cooler: str = "") -> dict:
    answers: dict[str, object] = {}

    def decide(pages, reading):
        decided = coolers.open_cooler(
            pages, reading, seals=seals, whole=whole, count=count, cooler=cooler
        )
        answers.update(decided.answer)
        return decided

    node.decide(decide)
    return answers


def receive(node: Node, visit: str, **given: object) -> str:
    answers: dict[str, object] = {}

    def decide(pages, reading):
        decided = bench.receive(pages, reading, bottle=node.codes[visit], **given)
        answers.update(decided.answer)
        return decided

    node.decide(decide)
    with node.pages() as pages:
        said = told.said_of(pages, node.bottle(visit), again=bool(answers["again"]))
    return f"{said.word}/{said.why}"


def receipts(node: Node, visit: str) -> list[BottleReceived]:
    """Return the living receipts of that bottle."""
    with node.pages() as pages:
        entries = pages.story(f"bottle:{node.codes[visit]}")
        gone = pages.gone(entry.hash for entry in entries)
    return [
        entry.fact
        for entry in entries
        if isinstance(entry.fact, BottleReceived) and entry.hash not in gone
    ]


def findings(node: Node) -> list[str]:
    with node.pages() as pages:
        return sorted(row["kind"] for row in pages.findings(node.clock.at))


def arrival(node: Node, cooler: str) -> arrivals.Arrival:
    with node.pages() as pages:
        return arrivals.arrival(pages, cooler)


def test_a_cooler_is_found_by_the_seal_as_it_was_read(packed):
    assert opened(packed, "88214") == {"cooler": "C-AAAAAA", "again": False}
    seen = arrival(packed, "C-AAAAAA").opened
    assert (seen.seal_read, seen.whole, seen.count) == (("88214",), True, 2)
    assert seen.laboratory == "bench-lab"


def test_seals_that_lead_to_none_ask_which_cooler_and_record_nothing(packed):
    assert opened(packed, "88 999") == {"which": True}
    with packed.pages() as pages:
        assert len(arrivals.on_the_road(pages)) == 2


def test_a_chosen_cooler_keeps_the_seal_as_read_and_the_difference_is_a_finding(packed):
    assert opened(packed, "88 999", cooler="C-AAAAAA")["cooler"] == "C-AAAAAA"
    assert arrival(packed, "C-AAAAAA").opened.seal_read == ("88 999",)
    assert "seal-differs" in findings(packed)


def test_one_without_a_seal_is_chosen_and_opened_all_the_same(packed):
    assert opened(packed, whole=False) == {"which": True}
    opened(packed, whole=False, cooler="C-AAAAAA")
    assert arrival(packed, "C-AAAAAA").opened.seal_read == ()


def test_a_whole_seal_without_a_number_is_not_said(packed):
    with pytest.raises(coolers.SealUnsaid):
        opened(packed, " - ")


def test_a_cooler_that_nobody_knows_gets_an_id_of_its_own(packed):
    answer = opened(packed, "A 1", cooler=coolers.NO_RECORD)
    assert answer["cooler"] not in ("C-AAAAAA", "C-BBBBBB")
    assert arrival(packed, str(answer["cooler"])).expected == 2


def test_a_cooler_that_was_never_packed_cannot_be_chosen(packed):
    with pytest.raises(Unknown):
        opened(packed, "A 1", cooler="C-CCCCCC")


def test_a_cooler_opened_already_is_shown_again_and_not_opened_twice(packed):
    opened(packed, "88 214")
    assert opened(packed, "88 214") == {"cooler": "C-AAAAAA", "again": True}
    assert len(arrival(packed, "C-AAAAAA").openings) == 1


def test_bottles_of_an_open_cooler_are_in_and_nothing_is_found(packed):
    opened(packed, "88 214")
    for visit in THREE[:2]:
        assert receive(packed, visit, cooler="C-AAAAAA") == "in/in"
    assert arrival(packed, "C-AAAAAA").received == tuple(packed.codes[v] for v in THREE[:2])
    assert findings(packed) == []


def test_a_bottle_of_a_cooler_on_the_road_stops_and_records_nothing(packed):
    opened(packed, "88 214")
    with pytest.raises(coolers.OtherCooler) as caught:
        receive(packed, "Q-0403", cooler="C-AAAAAA")
    assert caught.value.values["cooler"] == "C-BBBBBB"
    assert caught.value.values["why"] == "on-the-road"
    assert receipts(packed, "Q-0403") == []


def test_a_loose_bottle_of_a_sealed_cooler_asks_for_the_cooler_first(packed):
    with pytest.raises(coolers.OtherCooler):
        receive(packed, "Q-0403")


def test_a_bottle_of_another_cooler_open_here_says_which(packed):
    opened(packed, "88 214")
    opened(packed, "88 219", count=1)
    with pytest.raises(coolers.OtherCooler) as caught:
        receive(packed, "Q-0403", cooler="C-AAAAAA")
    assert caught.value.values["why"] == "open-here"


def test_kept_here_it_is_in_with_the_note_and_the_check(packed):
    opened(packed, "88 214")
    with pytest.raises(bench.ReasonMissing):
        receive(packed, "Q-0403", cooler="C-AAAAAA", arrived="keep")
    said = receive(packed, "Q-0403", cooler="C-AAAAAA", arrived="keep", reason="same van")
    assert said == "in/in"
    (receipt,) = receipts(packed, "Q-0403")
    assert (receipt.cooler, receipt.checks) == ("C-AAAAAA", {"cooler": "cooler"})


def test_set_aside_it_is_held(packed):
    opened(packed, "88 214")
    assert receive(packed, "Q-0403", cooler="C-AAAAAA", arrived="aside") == "hold/held"
    assert packed.bottle("Q-0403")["outcome"] == "held"


def test_a_loose_bottle_of_an_opened_cooler_belongs_to_it(packed):
    opened(packed, "88 219", count=1)
    assert receive(packed, "Q-0403") == "in/in"
    assert receipts(packed, "Q-0403")[0].cooler == "C-BBBBBB"


def test_the_same_bottle_again_in_the_same_cooler_is_no_finding(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    assert receive(packed, "Q-0401", cooler="C-AAAAAA") == "in/again"
    assert len(receipts(packed, "Q-0401")) == 1
    assert "received-twice" not in findings(packed)


def test_a_bottle_in_that_turns_up_in_another_cooler_is_held_and_a_finding(packed):
    opened(packed, "88 214")
    opened(packed, "88 219", count=1)
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    assert receive(packed, "Q-0401", cooler="C-BBBBBB") == "hold/held"
    assert "received-twice" in findings(packed)
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    assert len(receipts(packed, "Q-0401")) == 2


def test_a_bottle_in_no_cooler_s_record_is_in_where_it_stands(packed):
    packed.add_visit("Q-0404", 4)
    packed.fill("Q-0404")
    opened(packed, "88 214")
    assert receive(packed, "Q-0404", cooler="C-AAAAAA") == "in/in"


def test_a_fault_seen_after_the_first_scan_corrects_the_receipt_and_is_no_second_one(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    came = packed.bottle("Q-0401")["received_at"]
    packed.clock.pass_by(minutes=5)
    assert receive(packed, "Q-0401", cooler="C-AAAAAA", checks=("leaks",)) == "hold/held"
    (receipt,) = receipts(packed, "Q-0401")
    assert (receipt.outcome, receipt.checks) == ("held", {"tight": "leaks"})
    assert packed.bottle("Q-0401")["received_at"] == came
    assert "received-twice" not in findings(packed)


def test_a_second_fault_stands_beside_the_first(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA", checks=("leaks",))
    receive(packed, "Q-0401", cooler="C-AAAAAA", checks=("low",))
    (receipt,) = receipts(packed, "Q-0401")
    assert receipt.checks == {"tight": "leaks", "volume": "low"}


def test_a_fault_more_lifts_no_refusal(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA", outcome="refused", reason="empty")
    assert receive(packed, "Q-0401", cooler="C-AAAAAA", checks=("low",)) == "stop/refused"


def undo(node: Node) -> None:
    node.decide(lambda pages, reading: bench.undo(pages, reading, person="clerk-1"))


def test_the_undo_card_takes_the_last_receipt_back_and_a_second_trigger_no_more(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    receive(packed, "Q-0402", cooler="C-AAAAAA")
    undo(packed)
    with pytest.raises(bench.NothingToTakeBack):
        undo(packed)
    assert receipts(packed, "Q-0402") == []
    assert len(receipts(packed, "Q-0401")) == 1


def test_the_undo_card_takes_a_correction_back_and_the_receipt_stands_as_before(packed):
    opened(packed, "88 214")
    receive(packed, "Q-0401", cooler="C-AAAAAA")
    receive(packed, "Q-0401", cooler="C-AAAAAA", checks=("leaks",))
    undo(packed)
    assert packed.bottle("Q-0401")["outcome"] == "accepted"


def test_the_undo_card_takes_no_opening_back(packed):
    opened(packed, "88 214")
    with pytest.raises(bench.NothingToTakeBack):
        undo(packed)


def test_a_mistyped_opening_is_taken_back_and_stays_in_the_record(packed):
    opened(packed, "88 214", count=20)
    entry = arrival(packed, "C-AAAAAA").openings[0].hash
    packed.decide(lambda pages, reading: bench.take_back(pages, reading, entry, latest=entry))
    assert arrival(packed, "C-AAAAAA").opened is None
    opened(packed, "88 214", count=2)
    with packed.pages() as pages:
        story = pages.story("cooler:C-AAAAAA")
    assert [e.fact.count for e in story if e.fact.kind == "cooler.opened"] == [20, 2]


def test_nobody_takes_a_card_for_a_number(packed):
    opened(packed, "88 214")
    with pytest.raises(bench.NumberIsCard):
        receive(packed, "Q-0401", cooler="C-AAAAAA", laboratory_number="COUNTER LEAK")


def test_a_record_that_comes_after_the_receipt_still_stops_the_bottle(node):
    code = node.codes["Q-0401"]
    assert receive(node, "Q-0401") == "in/not-filled"
    node.deviate("Q-0401")
    node.fill("Q-0401")
    with node.pages() as pages:
        said = told.said_of(pages, pages.bottle(code))
    assert (said.word, said.why) == ("hold", "deviation")
