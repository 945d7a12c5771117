"""The Desk's decisions: held bottles before any result, findings with a reason, void codes."""

import pytest

from fieldapp.commands import desk
from fieldapp.commands.bench import ReasonMissing
from fieldapp.domain import codes
from fieldapp.domain.errors import StepOver, Unknown
from fieldapp.domain.facts import BottleReceived
from fieldapp.projections import rounds
from tests.counter import Node


def hold(node: Node, site: str) -> str:
    """Fill a bottle and hold it at the Bench."""
    node.fill(site)
    code = node.codes[site]
    node.record(BottleReceived(bottle=code, outcome="held", reason="it leaks a little"))
    return code


def decide(node: Node, code: str, *, analyse: bool, reason: str = "as the regulator says") -> None:
    node.decide(
        lambda pages, reading: desk.decide_analysis(
            pages, reading, bottle=code, analyse=analyse, reason=reason
        ),
        by="coordinator-1",
    )


def settle(node: Node, finding: str, reason: str = "seen in the van") -> None:
    node.decide(
        lambda pages, reading: desk.settle_finding(pages, reading, finding=finding, reason=reason),
        by="coordinator-1",
    )


def void(node: Node, code: str, why: str = "broken") -> None:
    node.decide(lambda pages, reading: desk.void_bottle(pages, reading, bottle=code, why=why))


def the_finding(node: Node) -> str:
    with node.pages() as pages:
        [row] = pages.findings(node.clock.at)
    return row["finding"]


def test_a_held_bottle_decided_against_is_no_longer_to_analyse(node):
    code = hold(node, "Q-0401")
    assert node.bottle("Q-0401")["to_analyse"] == 1
    decide(node, code, analyse=False)
    row = node.bottle("Q-0401")
    assert (row["decided"], row["to_analyse"]) == ("leave", 0)


def test_a_held_bottle_may_be_analysed_all_the_same(node):
    decide(node, hold(node, "Q-0401"), analyse=True)
    assert node.bottle("Q-0401")["decided"] == "analyse"


def test_the_mind_may_change_while_no_result_exists(node):
    code = hold(node, "Q-0401")
    decide(node, code, analyse=False)
    decide(node, code, analyse=True)
    assert node.bottle("Q-0401")["to_analyse"] == 1


def test_once_a_result_is_in_nobody_decides_any_more(node):
    code = hold(node, "Q-0401")
    node.report("Q-0401", "22")
    with pytest.raises(desk.ResultStands):
        decide(node, code, analyse=False)
    assert node.bottle("Q-0401")["decided"] == ""


def test_only_a_held_bottle_waits_for_a_decision(node):
    node.fill("Q-0401")
    node.accept("Q-0401")
    with pytest.raises(desk.NotHeld):
        decide(node, node.codes["Q-0401"], analyse=False)


def undecided(node: Node) -> list[str]:
    with node.pages() as pages:
        return [row["bottle"] for row in rounds.bottles(pages, "spring", "undecided")]


def test_a_deviation_that_came_after_the_receipt_waits_for_the_desk_all_the_same(node):
    node.accept("Q-0401")
    node.accept("Q-0402")
    assert undecided(node) == []
    node.deviate("Q-0401")
    node.fill("Q-0401")
    node.fill("Q-0402")
    code = node.codes["Q-0401"]
    assert undecided(node) == [code]
    node.decide(
        lambda pages, reading: desk.decide_analysis(
            pages, reading, bottle=code, analyse=False, reason="flushed"
        )
    )
    assert undecided(node) == []
    assert node.bottle("Q-0401")["to_analyse"] == 0


def test_a_late_deviation_is_not_decided_once_a_result_is_in(node):
    node.accept("Q-0401")
    node.report("Q-0401", "4")
    node.deviate("Q-0401")
    node.fill("Q-0401")
    assert undecided(node) == []
    with pytest.raises(desk.ResultStands):
        node.decide(
            lambda pages, reading: desk.decide_analysis(
                pages, reading, bottle=node.codes["Q-0401"], analyse=False, reason="flushed"
            )
        )


@pytest.mark.parametrize("reason", ["", "  "])
def test_a_decision_needs_a_reason(node, reason):
    code = hold(node, "Q-0401")
    with pytest.raises(ReasonMissing):
        decide(node, code, analyse=False, reason=reason)


def test_the_same_decision_twice_is_one_entry(node):
    code = hold(node, "Q-0401")
    decide(node, code, analyse=False)
    with pytest.raises(StepOver) as caught:
        decide(node, code, analyse=False)
    assert caught.value.values["at"].startswith("2027-05-04T")


def test_a_settled_finding_stays_listed_and_is_open_no_more(node):
    node.report("Q-0401", "3")
    finding = the_finding(node)
    settle(node, finding)
    with node.pages() as pages:
        assert pages.findings(node.clock.at) == []
        [row] = pages.findings(node.clock.at, settled=True)
    assert row["finding"] == finding


def test_new_evidence_opens_it_again_beside_the_former_settlement(node):
    node.report("Q-0401", "3")
    settle(node, the_finding(node))
    node.record(BottleReceived(bottle=node.codes["Q-0401"], outcome="accepted"))
    node.record(BottleReceived(bottle=node.codes["Q-0401"], outcome="refused", reason="leaks"))
    again = the_finding(node)
    settle(node, again, "the second look was right")
    node.record(BottleReceived(bottle=node.codes["Q-0401"], outcome="accepted"))
    assert the_finding(node) != again
    with node.pages() as pages:
        former = rounds.settlements(pages, "received-twice", f"bottle:{node.codes['Q-0401']}")
    assert [entry.fact.reason for entry in former] == ["the second look was right"]


def test_settling_moves_no_result(node):
    node.report("Q-0401", "3")
    before = node.bottle("Q-0401")
    settle(node, the_finding(node))
    assert node.bottle("Q-0401") == before


def test_a_finding_is_settled_once(node):
    node.report("Q-0401", "3")
    finding = the_finding(node)
    settle(node, finding)
    with pytest.raises(StepOver):
        settle(node, finding, "another reason")


def test_a_settlement_needs_a_reason(node):
    node.report("Q-0401", "3")
    with pytest.raises(ReasonMissing):
        settle(node, the_finding(node), " ")


def test_what_is_still_on_its_way_is_not_settled(node):
    node.fill("Q-0401")
    with node.pages() as pages:
        [waiting] = rounds.awaited(pages, "spring", node.clock.at)
    with pytest.raises(desk.NotYetAFinding):
        settle(node, waiting["finding"])
    node.clock.pass_by(days=2)
    settle(node, waiting["finding"])


def test_a_finding_that_nobody_knows_is_not_settled(node):
    with pytest.raises(Unknown):
        settle(node, "0" * 16)


def test_a_broken_bottle_s_code_is_voided_and_counts_no_more(node):
    void(node, node.codes["Q-0401"])
    row = node.bottle("Q-0401")
    assert (row["voided"], row["issued"], row["to_analyse"]) == ("broken", 0, 0)


def test_a_code_that_holds_water_cannot_be_voided(node):
    node.fill("Q-0401")
    with pytest.raises(desk.BottleInUse):
        void(node, node.codes["Q-0401"])


def test_a_code_is_voided_once_and_with_a_known_reason(node):
    with pytest.raises(Unknown):
        void(node, node.codes["Q-0401"], "tired of it")
    void(node, node.codes["Q-0401"], "lost")
    with pytest.raises(StepOver):
        void(node, node.codes["Q-0401"], "broken")


def test_a_code_that_nobody_issued_cannot_be_voided(node):
    with pytest.raises(Unknown):
        void(node, codes.new_code())
