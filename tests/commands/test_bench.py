"""The counter: what is received, held, refused and told apart."""

from dataclasses import replace

import pytest

from fieldapp.commands import bench, told
from fieldapp.commands import results as imports
from fieldapp.domain import codes
from fieldapp.domain.codes import BadCode
from fieldapp.domain.errors import Unknown
from fieldapp.domain.facts import BottleVoided, ResultReported
from fieldapp.projections import rounds
from tests.counter import Node


def receive(node: Node, code: str, **given: object) -> str:
    """Receive a code and return the counter's answer as ``word/why``."""
    answered: dict[str, object] = {}

    def decide(pages, reading):
        decided = bench.receive(pages, reading, bottle=code, **given)
        answered.update(decided.answer)
        return decided

    node.decide(decide)
    with node.pages() as pages:
        row = pages.bottle(answered["bottle"])
        said = told.said_of(pages, row, again=bool(answered["again"]))
    return f"{said.word}/{said.why}"


def receipts(node: Node, code: str) -> int:
    with node.pages() as pages:
        entries = pages.story(f"bottle:{code}")
    return sum(entry.fact.kind == "bottle.received" for entry in entries)


def findings(node: Node) -> list[str]:
    with node.pages() as pages:
        return [row["kind"] for row in pages.findings(node.clock.at)]


def test_a_filled_bottle_is_in_with_the_laboratory_s_number(node):
    node.fill("Q-0401")
    assert receive(node, node.codes["Q-0401"], laboratory_number="26-0418") == "in/in"
    row = node.bottle("Q-0401")
    assert (row["outcome"], row["laboratory_number"]) == ("accepted", "26-0418")
    with node.pages() as pages:
        assert pages.by_number("26-0418") == [node.codes["Q-0401"]]


def test_a_code_is_taken_as_it_is_typed(node):
    node.fill("Q-0401")
    typed = codes.grouped(node.codes["Q-0401"]).lower()
    assert receive(node, typed) == "in/in"


def test_the_same_bottle_again_is_in_already_and_records_nothing(node):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    receive(node, code, laboratory_number="26-0418")
    assert receive(node, code, laboratory_number="26-0419") == "in/again"
    assert receipts(node, code) == 1
    assert node.bottle("Q-0401")["laboratory_number"] == "26-0418"
    assert "received-twice" not in findings(node)


def test_a_second_sticker_on_one_bottle_is_kept_and_becomes_a_finding(node):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    receive(node, code, laboratory_number="26-0418", counted=False)
    receive(node, code, laboratory_number="26-0431", counted=False)
    assert receipts(node, code) == 2
    assert "received-twice" in findings(node)


@pytest.mark.parametrize(
    ("outcome", "again"), [("held", "hold/held"), ("refused", "stop/refused-again")]
)
def test_a_trigger_that_fires_twice_lifts_no_hold_and_no_refusal(node, outcome, again):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    receive(node, code, outcome=outcome, reason="it leaks")
    assert receive(node, code) == again
    assert receipts(node, code) == 1
    assert node.bottle("Q-0401")["outcome"] == outcome


def test_a_leak_seen_after_the_first_scan_is_recorded_beside_it(node):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    receive(node, code)
    assert receive(node, code, outcome="refused", checks=("leaks",)) == "stop/refused"
    assert receipts(node, code) == 2
    assert node.bottle("Q-0401")["outcome"] == "refused"


def test_a_bottle_whose_tablet_was_not_heard_is_received_all_the_same(node):
    assert receive(node, node.codes["Q-0402"]) == "in/not-filled"
    assert node.bottle("Q-0402")["outcome"] == "accepted"
    assert "received-not-filled" not in findings(node)


def test_the_tablet_s_record_coming_later_clears_the_waiting(node):
    receive(node, node.codes["Q-0402"])
    node.fill("Q-0402")
    node.clock.pass_by(days=3)
    assert findings(node) == []


def test_last_heard_is_the_latest_entry_of_the_log_in_which_the_sampler_works(node):
    with node.pages() as pages:
        assert rounds.last_heard(pages, "north") == ""
    node.fill("Q-0401")
    with node.pages() as pages:
        assert rounds.last_heard(pages, "north").startswith("2027-05-04T12:")


def test_a_right_code_that_no_round_issued_is_held_and_becomes_a_finding(node):
    stranger = codes.new_code()
    assert receive(node, stranger) == "hold/unknown"
    assert findings(node) == ["unknown-bottle"]


def test_a_wrong_check_character_is_no_bottle_and_records_nothing(node):
    code = node.codes["Q-0401"]
    wrong = code[:-1] + ("0" if code[-1] != "0" else "1")
    with pytest.raises(BadCode) as caught:
        receive(node, wrong)
    assert caught.value.values["why"] == "check"
    assert receipts(node, code) == 0


def test_a_bottle_with_a_deviation_is_held_before_analysis(node):
    node.deviate("Q-0401")
    node.fill("Q-0401")
    assert receive(node, node.codes["Q-0401"]) == "hold/deviation"
    assert node.bottle("Q-0401")["outcome"] == "held"
    with node.pages() as pages:
        said = told.said_of(pages, pages.bottle(node.codes["Q-0401"]))
    assert "pre-flush" in [found["kind"] for found in said.deviations]


def test_a_deviation_of_one_visit_does_not_hold_another_s_bottle(node):
    node.deviate("Q-0401")
    node.fill("Q-0402")
    assert receive(node, node.codes["Q-0402"]) == "in/in"


def test_a_deviation_that_names_no_draw_does_not_bear_on_the_blank():
    visit = {"deviations": [{"kind": "stand-short", "draws": []}]}
    blank = {"kind": "blank", "draw": 2}
    first = {"kind": "first-draw", "draw": 1}
    assert rounds.deviations_on(visit, blank) == ()
    assert len(rounds.deviations_on(visit, first)) == 1


def test_a_fault_that_is_seen_holds_the_bottle(node):
    node.fill("Q-0401")
    assert receive(node, node.codes["Q-0401"], checks=("low",)) == "hold/held"
    with node.pages() as pages:
        fact = pages.story(f"bottle:{node.codes['Q-0401']}")[-1].fact
    assert fact.checks == {"volume": "low"}


@pytest.mark.parametrize("outcome", ["held", "refused"])
def test_nobody_holds_or_refuses_without_a_reason(node, outcome):
    with pytest.raises(bench.ReasonMissing):
        receive(node, node.codes["Q-0401"], outcome=outcome)
    assert node.bottle("Q-0401")["outcome"] == ""


def test_the_reason_of_a_refusal_stays_out_of_the_signed_part(node):
    code = node.codes["Q-0401"]
    receive(node, code, outcome="refused", reason="broken on the way by Imaginary Driver")
    with node.pages() as pages:
        entry = pages.story(f"bottle:{code}")[-1]
        assert pages.fact(entry.hash, private=True).fact.reason.endswith("Imaginary Driver")
        stored = pages.row("SELECT data FROM p_fact WHERE hash = ?", (entry.hash,))
    assert "Imaginary" not in stored["data"]


def test_a_voided_code_in_hand_is_held(node):
    node.record(BottleVoided(bottle=node.codes["Q-0401"], why="lost"))
    assert receive(node, node.codes["Q-0401"]) == "hold/voided"


def test_one_laboratory_number_stands_on_one_bottle(node):
    node.fill("Q-0401")
    node.fill("Q-0402")
    receive(node, node.codes["Q-0401"], laboratory_number="26-0418")
    with pytest.raises(bench.NumberTaken) as caught:
        receive(node, node.codes["Q-0402"], laboratory_number="26-0418")
    assert caught.value.values["other"] == node.codes["Q-0401"]


@pytest.mark.parametrize(
    ("number", "following"),
    [("26-0418", "26-0419"), ("L999", "L1000"), ("0099", "0100"), ("7a", "8a"), ("", ""),
     ("none", "")],
)  # fmt: skip
def test_numbers_count_up_as_wide_as_they_were(number, following):
    assert bench.next_number(number) == following


def test_a_receipt_can_be_taken_back_until_the_next(node):
    node.fill("Q-0401")
    receive(node, node.codes["Q-0401"])
    node.clock.pass_by(hours=1)
    with node.pages() as pages:
        latest = rounds.latest_receipt_by(pages, "clerk-1").hash
    node.decide(lambda pages, reading: bench.take_back(pages, reading, latest, latest=latest))
    assert node.bottle("Q-0401")["outcome"] == ""


def test_after_the_next_receipt_ten_seconds_are_left_and_no_more(node):
    receive(node, node.codes["Q-0401"])
    with node.pages() as pages:
        first = rounds.latest_receipt_by(pages, "clerk-1").hash
    receive(node, node.codes["Q-0402"])
    with node.pages() as pages:
        latest = rounds.latest_receipt_by(pages, "clerk-1").hash
    node.clock.pass_by(seconds=20)
    with pytest.raises(bench.TooLateToTakeBack):
        node.decide(lambda pages, reading: bench.take_back(pages, reading, first, latest=latest))
    assert node.bottle("Q-0401")["outcome"] == "accepted"


def test_only_a_receipt_can_be_taken_back_at_the_counter(node):
    with node.pages() as pages:
        issued = pages.story(f"bottle:{node.codes['Q-0401']}")[0].hash
    with pytest.raises(Unknown):
        node.decide(lambda pages, reading: bench.take_back(pages, reading, issued, latest=issued))


class ReadRow:
    """One row of a results file, as the reader gives it."""

    def __init__(self, row: int, given: ResultReported) -> None:
        self.row, self.given = row, given

    def reported(self, file: str) -> ResultReported:
        return replace(self.given, file=file, row=self.row)


def results(node: Node, *levels: tuple[str, str], sha: str = "a" * 64) -> tuple[str, ...]:
    rows = [
        ReadRow(
            n, ResultReported(bottle=node.codes[visit], analyte="lead", value=value, unit="ug/L")
        )
        for n, (visit, value) in enumerate(levels, start=2)
    ]
    return node.decide(
        lambda pages, reading: imports.import_results(
            pages, reading, rows, file_sha=sha, round_id="spring"
        )
    )


def test_a_results_file_is_learned_and_each_row_reported(node):
    node.fill("Q-0401")
    receive(node, node.codes["Q-0401"])
    entries = results(node, ("Q-0401", "3.2"), ("Q-0402", "4"))
    assert len(entries) == 3
    with node.pages() as pages:
        learned = pages.fact(entries[0]).fact
    assert (learned.kind, learned.way, learned.file) == ("results.learned", "file", "a" * 64)
    assert learned.learned_at.startswith("2027-05-04T")
    assert node.bottle("Q-0401")["results"]["lead"]["value"] == "3.2"


def test_the_same_file_again_changes_nothing(node):
    results(node, ("Q-0401", "3.2"))
    assert results(node, ("Q-0401", "3.2")) == ()


def test_a_row_twice_in_one_file_is_reported_once(node):
    assert len(results(node, ("Q-0401", "3.2"), ("Q-0401", "3.2"))) == 2


def test_a_changed_value_stands_beside_the_former_as_a_finding(node):
    receive(node, node.codes["Q-0401"])
    results(node, ("Q-0401", "3.2"))
    assert len(results(node, ("Q-0401", "3.9"), sha="b" * 64)) == 2
    assert "results-differ" in findings(node)


def test_a_result_of_a_bottle_never_received_is_kept_and_is_a_finding(node):
    results(node, ("Q-0403", "3.2"))
    assert "result-without-receipt" in findings(node)
