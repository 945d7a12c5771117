"""The Desk's table of a round, its lists and the official figure that stands on it."""

from datetime import timedelta
from decimal import Decimal

import pytest

from fieldapp.domain.facts import (
    AnalysisDecided,
    BottleIssued,
    BottleReceived,
    BottleVoided,
    DeviationStated,
    RoundChanged,
    VisitOpened,
)
from fieldapp.projections import answers, rounds
from tests.counter import MORNING, Node

SITES = ("Q-0401", "Q-0402", "Q-0403")


def figure(node: Node, analyte: str = "lead") -> answers.Figure:
    with node.pages() as pages:
        found = answers.figures(pages, pages.round("spring"), node.clock.at)
    return next(one for one in found if one.answer.analyte == analyte)


def reasons(node: Node) -> dict[str, str]:
    return {candidate.site: reason for candidate, reason in figure(node).answer.left_out}


def totals(node: Node) -> dict[str, int]:
    with node.pages() as pages:
        return rounds.totals(pages, "spring")


def test_totals_count_bottles_as_they_go_along(node):
    node.fill("Q-0401")
    node.fill("Q-0402")
    node.accept("Q-0401", "26-1")
    node.report("Q-0401", "3")
    assert totals(node) == {
        "issued": 3, "filled": 2, "received": 1, "held": 0, "refused": 0, "to_analyse": 3,
        "resulted": 1,
    }  # fmt: skip


def test_an_unused_spare_and_a_voided_code_are_not_issued(node):
    node.record(
        BottleIssued(bottle="F8QY40YGEC9", round="spring", route="north"),
        BottleVoided(bottle=node.codes["Q-0403"], why="broken"),
    )
    assert totals(node)["issued"] == 2


def test_a_round_without_bottles_counts_nothing(node):
    with node.pages() as pages:
        assert set(rounds.totals(pages, "autumn").values()) == {0}


def test_held_is_received_and_refused_is_not(node):
    node.record(BottleReceived(bottle=node.codes["Q-0401"], outcome="held", reason="leaks"))
    node.record(BottleReceived(bottle=node.codes["Q-0402"], outcome="refused", reason="cracked"))
    counted = totals(node)
    assert (counted["received"], counted["held"], counted["refused"]) == (1, 1, 1)
    assert counted["to_analyse"] == 2


@pytest.mark.parametrize("which", sorted(rounds.LISTS))
def test_each_number_of_the_totals_is_as_long_as_the_list_it_opens(node, which):
    node.fill("Q-0401")
    node.fill("Q-0402")
    node.accept("Q-0401")
    node.record(BottleReceived(bottle=node.codes["Q-0402"], outcome="held", reason="leaks"))
    node.report("Q-0401", "3")
    counted = totals(node)
    expected = {
        "issued": 3, "filled": 2, "not-filled": 1, "received": 2, "not-received": 0, "held": 1,
        "undecided": 1, "refused": 0, "to-analyse": 3, "with-result": 1, "without-result": 2,
        "voided": 0,
    }  # fmt: skip
    with node.pages() as pages:
        assert len(rounds.bottles(pages, "spring", which)) == expected[which]
    assert counted.get(which.replace("-", "_"), expected[which]) == expected[which]


def test_the_table_has_a_row_a_visit_with_its_counts(node):
    node.fill("Q-0402")
    node.accept("Q-0402")
    with node.pages() as pages:
        table = rounds.table(pages, "spring", node.clock.at)
    assert [row["site"] for row in table] == list(SITES)
    row = table[1]
    assert (row["issued"], row["filled"], row["received"], row["resulted"]) == (1, 1, 1, 0)
    assert (row["stand_basis"], row["stand_verdict"]) == ("stated", "passes")
    assert row["protocol"] == "first-litre"


def test_a_finding_of_a_bottle_stands_at_its_visit_until_it_is_settled(node):
    node.report("Q-0402", "3")
    with node.pages() as pages:
        counts = rounds.findings_by_visit(pages, "spring", node.clock.at)
    assert counts == {"Q-0402": 1}


def test_two_codes_for_one_draw_stand_at_the_visit(node):
    node.record(
        BottleIssued(
            bottle="F8QY40YGEC9", round="spring", route="north", visit="Q-0403", draw=1,
            kind_="first-draw", purpose="compliance", volume_ml=1000, analyse=("lead",),
        )
    )  # fmt: skip
    with node.pages() as pages:
        assert rounds.findings_by_visit(pages, "spring", node.clock.at) == {"Q-0403": 1}


def test_filled_and_not_received_is_awaited_until_it_is_due(node):
    node.fill("Q-0401")
    with node.pages() as pages:
        assert [row["kind"] for row in rounds.awaited(pages, "spring", node.clock.at)] == [
            "filled-not-received"
        ]
        assert rounds.table(pages, "spring", node.clock.at)[0]["findings"] == 0
        later = node.clock.at + timedelta(days=1, minutes=1)
        assert rounds.awaited(pages, "spring", later) == []
        assert rounds.table(pages, "spring", later)[0]["findings"] == 1


def test_a_stranger_belongs_to_no_round(node):
    node.record(BottleReceived(bottle="F8QY40YGEC9", outcome="held"))
    with node.pages() as pages:
        assert [row["bottle"] for row in rounds.strangers(pages)] == ["F8QY40YGEC9"]
    assert totals(node)["received"] == 0


def test_the_figure_is_running_until_all_expected_results_are_in(node):
    for site in SITES:
        node.fill(site)
        node.accept(site)
    node.report("Q-0401", "4")
    node.report("Q-0402", "7")
    found = figure(node)
    assert (found.running, found.come, found.expected) == (True, 2, 3)
    assert found.answer.value == Decimal("7")
    node.report("Q-0403", "13")
    found = figure(node)
    assert (found.running, found.come, found.expected) == (False, 3, 3)
    # of fewer than five results the highest counts
    assert found.answer.value == Decimal("13")
    assert found.answer.exceeds is False


def test_after_the_period_the_figure_runs_no_more_but_says_what_is_missing(node):
    node.fill("Q-0401")
    node.report("Q-0401", "4")
    assert figure(node).running
    node.clock.pass_by(days=30)
    found = figure(node)
    assert (found.running, found.come, found.expected) == (False, 1, 3)


def test_copper_is_reckoned_apart_from_lead(node):
    node.fill("Q-0401")
    node.accept("Q-0401")
    node.report("Q-0401", "<2", "1400")
    assert figure(node).answer.value == 0
    copper = figure(node, "copper").answer
    assert (copper.value, copper.exceeds) == (Decimal("1400"), True)


def test_a_level_in_milligrams_enters_in_micrograms():
    level = answers.level_of({"value": "0.0155", "unit": "mg/L"})
    assert level.value == Decimal("15.5")


def test_a_bare_non_detect_is_no_blank_and_no_number():
    level = answers.level_of({"value": "", "unit": "ug/L", "qualifier": "ND"})
    assert (level.value, level.qualifier) == (None, "ND")


def test_what_did_not_enter_is_listed_with_its_reason(node):
    node.add_visit("Q-0404", 4, purpose="request")
    node.fill("Q-0404")
    node.report("Q-0404", "40")
    node.fill("Q-0401")
    node.accept("Q-0401")
    node.record(BottleReceived(bottle=node.codes["Q-0402"], outcome="refused", reason="leaks"))
    assert reasons(node) == {
        "Q-0401": "no-result", "Q-0402": "refused", "Q-0403": "not-received",
        "Q-0404": "not-compliance",
    }  # fmt: skip


def test_decided_against_before_a_result_stays_out_for_good(node):
    node.fill("Q-0401")
    code = node.codes["Q-0401"]
    node.record(BottleReceived(bottle=code, outcome="held", reason="leaks"))
    node.record(AnalysisDecided(bottle=code, analyse=False, reason="the cap was loose"))
    assert reasons(node)["Q-0401"] == "not-analysed"


def test_what_was_not_analysed_is_counted_by_the_direction_of_its_bias(node):
    node.deviate("Q-0401")
    for site in ("Q-0401", "Q-0402"):
        node.fill(site)
        code = node.codes[site]
        node.record(BottleReceived(bottle=code, outcome="held", reason="looked at"))
        node.record(AnalysisDecided(bottle=code, analyse=False, reason="not worth it"))
    with node.pages() as pages:
        assert answers.withheld(pages, "spring") == {"low": 1, "none": 1}


@pytest.mark.parametrize("kind", ["first-draw", "blank"])
@pytest.mark.parametrize("draws", [(), (1,), (2,), (1, 2)])
def test_the_list_of_the_undecided_reads_deviations_as_every_page_does(node, kind, draws):
    node.record(
        VisitOpened(visit="Q-0401"),
        DeviationStated(visit="Q-0401", step="stand", deviation="pre-flush", draws=draws),
    )
    node.accept("Q-0401")
    with node.store.transaction() as db:
        db.execute("UPDATE p_bottle SET kind = ? WHERE bottle = ?", (kind, node.codes["Q-0401"]))
    with node.pages() as pages:
        row = pages.bottle(node.codes["Q-0401"])
        bears = bool(rounds.deviations_on(pages.visit("Q-0401"), row))
        assert rounds.count(pages, "spring", "undecided") == int(bears)


def test_a_deviation_keeps_a_result_in_where_the_rule_counts_it(node):
    node.deviate("Q-0401")
    node.fill("Q-0401")
    node.report("Q-0401", "4")
    found = figure(node)
    assert [one.candidate.breached for one in found.answer.entered] == [True]


def test_the_day_of_collection_is_the_day_in_the_round_s_zone(node):
    """At 05:30 UTC on 1 June it is still 31 May where the taps are."""
    node.clock.at = MORNING.replace(month=6, day=1, hour=5, minute=30)
    node.fill("Q-0401")
    node.report("Q-0401", "4")
    assert figure(node).answer.n == 1
    node.clock.at = MORNING.replace(month=6, day=1, hour=6, minute=30)
    node.fill("Q-0402")
    node.report("Q-0402", "5")
    assert reasons(node)["Q-0402"] == "outside-period"


def test_the_round_s_own_convention_is_used(node):
    for number, site in enumerate(("Q-0404", "Q-0405", "Q-0406", "Q-0407"), start=4):
        node.add_visit(site, number)
    # rank 0.9 × 7 = 6.3: between the sixth and the seventh, 12 + 0.3 × 8
    levels = ("0", "1", "2", "3", "6", "12", "20")
    for site, level in zip(sorted(node.codes), levels, strict=True):
        node.fill(site)
        node.report(site, level)
    assert figure(node).answer.value == Decimal("14.4")
    assert figure(node).answer.rank == Decimal("6.3")
    with node.pages() as pages:
        given = pages.story("round:spring")[0].fact
    node.record(RoundChanged(**{**vars(given), "convention": "ceiling"}))
    found = figure(node).answer
    assert (found.value, found.exceeds) == (Decimal("20"), True)


def test_the_answer_is_the_same_in_any_order_of_arrival(node):
    node.report("Q-0402", "7")
    node.accept("Q-0402")
    node.fill("Q-0402")
    node.fill("Q-0401")
    node.accept("Q-0401")
    node.report("Q-0401", "4")
    found = figure(node).answer
    assert [one.candidate.site for one in found.entered] == ["Q-0401", "Q-0402"]
    with node.pages() as pages:
        assert pages.findings(node.clock.at) == []
