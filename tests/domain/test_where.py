"""The step engine walks each document to its end and records whatever happens on the way."""

from datetime import timedelta

import pytest

from fieldapp.domain import facts
from tests.domain.walking import PAIR, Kitchen

ASKED = ["open", "ask", "last-use", "ask", "ask", "ask", "ask"]


def test_a_first_litre_is_walked_to_its_end():
    kitchen = Kitchen()

    assert kitchen.walk() == [*ASKED, "set", "fill", "sign", "close"]

    standing = kitchen.where()
    assert standing.state == "closed"
    assert standing.due.kind == "over"
    assert standing.deviations == ()
    assert [one.state for one in standing.draws] == ["filled"]
    assert (standing.stand_verdict, standing.stand.basis) == ("passes", "stated")


def test_an_ordinary_first_litre_is_at_most_fourteen_presses():
    # R41: opening, the last use about three, each other act one
    acts = Kitchen().walk()

    assert sum(3 if one == "last-use" else 1 for one in acts) <= 14


def test_a_pair_is_five_litres_in_one_run():
    kitchen = Kitchen("first-and-fifth", PAIR)

    assert kitchen.walk() == [*ASKED, "set", "set", "tap", "fill", "sign", "close"]

    standing = kitchen.where()
    assert standing.deviations == ()
    assert [(one.draw, one.state, one.keep, one.purpose) for one in standing.draws] == [
        (1, "filled", True, "compliance"),
        (2, "poured", False, ""),
        (3, "poured", False, ""),
        (4, "poured", False, ""),
        (5, "filled", True, "compliance"),
    ]


def test_a_run_is_set_in_order_then_one_press_opens_and_one_closes():
    kitchen = Kitchen("first-and-fifth", PAIR).until("set")

    assert (kitchen.due.next_draw, kitchen.due.draws) == (1, (1, 2, 3, 4, 5))
    kitchen.obey()
    assert kitchen.due.next_draw == 5
    kitchen.obey()
    assert (kitchen.due.kind, kitchen.due.draws) == ("tap", (1, 2, 3, 4, 5))
    kitchen.obey()
    assert {one.state for one in kitchen.where().draws} == {"running"}
    assert (kitchen.due.kind, kitchen.due.draws) == ("fill", (1, 2, 3, 4, 5))


def test_a_round_that_keeps_the_poured_litres_sets_a_bottle_for_each():
    draws = tuple((n, "compliance") for n in range(1, 6))
    kitchen = Kitchen("first-and-fifth", draws, options={"keep_poured": True})

    assert kitchen.walk().count("set") == 5
    assert all(one.state == "filled" and one.keep for one in kitchen.where().draws)
    assert kitchen.where().deviations == ()


def test_a_blank_is_a_step_after_the_fills():
    kitchen = Kitchen(draws=((1, "compliance"), (2, "blank", "blank")))

    assert kitchen.walk() == [*ASKED, "set", "fill", "set", "blank", "sign", "close"]

    blank = kitchen.where().draws[-1]
    assert (blank.kind, blank.purpose, blank.analyse) == ("blank", "blank", ("lead", "copper"))
    assert kitchen.where().deviations == ()


def test_a_duplicate_is_filled_after_the_draw_and_before_the_blank():
    draws = ((1, "compliance"), (2, "blank", "blank"), (3, "duplicate", "duplicate"))
    kitchen = Kitchen(draws=draws)

    kitchen.walk()

    assert [one.kind for one in kitchen.where().draws] == ["first-draw", "duplicate", "blank"]


def test_what_the_round_answered_costs_no_press():
    kitchen = Kitchen(options={"preset": {"plumbing-work": "none", "last-use": "early"}})

    acts = kitchen.walk()

    assert acts.count("ask") == 4
    assert "last-use" in acts  # a statement for each house, never preset
    assert kitchen.where().answers["plumbing-work"] == "none"


def test_what_the_plan_answered_is_not_asked_and_still_counts():
    kitchen = Kitchen(answers={"aerator": "removed"})

    kitchen.walk()

    assert kitchen.kinds() == ["aerator-removed"]


def test_each_step_has_its_number_among_all():
    kitchen = Kitchen()
    numbers = []
    while kitchen.due.kind != "over":
        numbers.append((kitchen.where().number, kitchen.where().of))
        kitchen.obey()

    assert numbers == [(n, 9) for n in (1, 1, 2, 3, 4, 5, 6, 7, 7, 8, 9)]


def test_a_visit_not_begun_is_planned_and_due_to_be_opened():
    assert (Kitchen().where().state, Kitchen().due.kind) == ("planned", "open")


def test_a_visit_that_is_left_goes_on_where_it_was():
    kitchen = Kitchen().until("ask", question="aerator")
    number = kitchen.where().number
    kitchen.record(facts.VisitLeft, why="waiting")

    assert (kitchen.where().state, kitchen.due.kind, kitchen.where().number) == (
        "left",
        "open",
        number,
    )
    kitchen.obey()
    assert (kitchen.where().state, kitchen.due.question) == ("open", "aerator")


def test_another_tablet_resumes_a_visit_though_its_clock_is_slow():
    kitchen = Kitchen().until("ask", question="aerator")
    kitchen.record(facts.VisitLeft, why="waiting")
    kitchen.log = "log-b"
    kitchen.at -= timedelta(hours=3)
    kitchen.obey()

    assert (kitchen.where().state, kitchen.due.question) == ("open", "aerator")
    kitchen.wait(hours=4)
    kitchen.record(facts.VisitLeft, why="waiting")
    assert kitchen.where().state == "left"


@pytest.mark.parametrize(
    ("question", "answer", "outcome", "deviations"),
    [
        ("consent", "refused", "refused", []),
        ("filter", "filter", "unfit", ["filter-in-place"]),
        ("filter", "softener", "unfit", ["softener-in-place"]),
        ("tap", "not-drinking", "unfit", ["not-drinking-tap"]),
    ],
)
def test_an_answer_that_ends_the_visit_leaves_only_closing(question, answer, outcome, deviations):
    kitchen = Kitchen().until("ask", question=question)
    kitchen.obey(answer)

    assert (kitchen.due.kind, kitchen.where().stopped) == ("close", outcome)
    kitchen.obey()
    assert (kitchen.due.kind, kitchen.where().state) == ("over", "closed")
    assert kitchen.kinds() == deviations


def test_an_answer_taken_back_ends_nothing():
    kitchen = Kitchen().until("ask", question="filter")
    kitchen.obey("filter")
    kitchen.withdraw(kitchen.entries[-1])

    assert (kitchen.due.question, kitchen.where().stopped) == ("filter", "")
    assert kitchen.kinds() == []


def test_an_answer_given_again_counts_but_the_first_is_not_forgotten():
    kitchen = Kitchen().until("ask", question="filter")
    kitchen.obey("filter")
    kitchen.answer("filter", "none")

    assert (kitchen.where().answers["filter"], kitchen.where().stopped) == ("none", "")
    assert kitchen.kinds() == ["filter-in-place"]


def test_what_is_drawn_against_a_refusal_is_recorded_as_it_happened():
    kitchen = Kitchen().until("ask", question="consent")
    kitchen.obey("refused")
    kitchen.record(facts.BottleSet, bottle="B", draw=1, kind_="first-draw", purpose="compliance")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line")

    assert ("drawn-after-stop", (1,)) in kitchen.deviations()
    assert kitchen.where().draws[0].state == "filled"


@pytest.mark.parametrize(
    ("question", "answer", "kind", "bias"),
    [
        ("tap", "hot", "hot-water", "high"),
        ("aerator", "cleaned", "aerator-cleaned", "low"),
        ("aerator", "removed", "aerator-removed", "either"),
        ("plumbing-work", "recent", "plumbing-work", "high"),
        ("aerator", "in the sink", "not-as-expected", "either"),
    ],
)
def test_an_answer_that_deviates_is_noted_with_its_bias_and_the_visit_goes_on(
    question, answer, kind, bias
):
    kitchen = Kitchen().until("ask", question=question)
    asked = kitchen.where().number
    kitchen.obey(answer)

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias, found.detected) == (kind, bias, True)
    assert found.evidence == (kitchen.entries[-1].hash,)
    assert kitchen.where().number == asked + 1


@pytest.mark.parametrize(
    ("fill", "kind", "bias"),
    [
        ("below", "fill-below", "either"),
        ("over", "fill-over", "low"),
        ("spilled", "fill-spilled", "low"),
    ],
)
def test_a_first_litre_not_at_the_line_is_a_deviation_of_that_draw(fill, kind, bias):
    kitchen = Kitchen().until("fill")
    kitchen.obey(fill=fill)

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias, found.draws) == (kind, bias, (1,))


def test_a_poured_litre_caught_short_moves_the_fifth():
    kitchen = Kitchen("first-and-fifth", PAIR).until("fill")
    for draw in (1, 5):
        kitchen.record(facts.BottleFilled, bottle=f"BOTTLE-{draw}", draw=draw, fill="line")
    for draw in (2, 3, 4):
        kitchen.record(facts.DrawPoured, draw=draw, fill="below" if draw == 3 else "line")

    assert ("litres-shifted", (5,)) in kitchen.deviations()
    assert ("fill-below", (3,)) not in kitchen.deviations()


def test_a_blank_below_the_line_bends_nothing():
    kitchen = Kitchen(draws=((1, "compliance"), (2, "blank", "blank"))).until("blank")
    kitchen.obey(fill="below")

    assert kitchen.deviations() == []


def test_the_fifth_litre_filled_before_the_fourth_is_out_of_order():
    kitchen = Kitchen("first-and-fifth", PAIR).until("fill")
    for draw in (1, 5, 2, 3, 4):
        kitchen.wait(seconds=12)
        if draw in (1, 5):
            kitchen.record(facts.BottleFilled, bottle=f"BOTTLE-{draw}", draw=draw, fill="line")
        else:
            kitchen.record(facts.DrawPoured, draw=draw, fill="line")

    assert kitchen.deviations() == [("wrong-order", (4, 5))]
    assert kitchen.due.kind == "sign"


def test_a_bottle_filled_before_it_was_scanned_is_out_of_order():
    kitchen = Kitchen().until("set")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line")
    kitchen.record(facts.BottleSet, bottle="B", draw=1, kind_="first-draw", purpose="compliance")

    assert kitchen.deviations() == [("wrong-order", (1,))]
    assert kitchen.due.kind == "sign"


def test_a_bottle_that_a_resident_filled_was_not_scanned_first():
    kitchen = Kitchen().until("set")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")

    assert kitchen.deviations() == []


def test_a_sheet_typed_in_later_keeps_the_order_of_its_times():
    kitchen = Kitchen().until("set")
    kitchen.obey()
    kitchen.wait(hours=3)
    kitchen.record(
        facts.BottleFilled, bottle="BOTTLE-1", draw=1, fill="line", basis="paper",
        done_at="2027-05-04T12:03:00.000Z",
    )  # fmt: skip

    assert kitchen.deviations() == []
    assert kitchen.where().stand.shortest == timedelta(hours=8, minutes=3)


def test_a_bottle_scanned_now_for_a_filling_typed_from_paper_is_in_order():
    kitchen = Kitchen().until("set")
    kitchen.wait(hours=3)
    kitchen.obey()
    kitchen.record(
        facts.BottleFilled, bottle="BOTTLE-1", draw=1, fill="line", basis="paper",
        done_at="2027-05-04T12:03:00.000Z",
    )  # fmt: skip

    assert kitchen.deviations() == []


def test_a_scan_typed_after_the_filling_keeps_the_order_of_its_times():
    kitchen = Kitchen().until("set")
    kitchen.wait(minutes=10)
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line")
    kitchen.record(
        facts.BottleSet, bottle="B", draw=1, kind_="first-draw", purpose="compliance",
        basis="paper", done_at="2027-05-04T12:05:00.000Z",
    )  # fmt: skip

    assert kitchen.deviations() == []


def test_another_bottle_than_the_one_set_is_a_deviation():
    kitchen = Kitchen().until("fill")
    kitchen.record(facts.BottleFilled, bottle="OTHER", draw=1, fill="line")

    assert kitchen.deviations() == [("wrong-bottle", (1,))]
    assert kitchen.where().draws[0].bottle == "OTHER"


def test_a_broken_bottle_gives_way_to_a_spare():
    kitchen = Kitchen().until("fill")
    kitchen.record(facts.BottleSet, bottle="SPARE", draw=1, kind_="first-draw", purpose="")

    assert kitchen.where().draws[0].bottle == "SPARE"
    kitchen.obey()
    assert kitchen.deviations() == []


def test_a_bottle_printed_for_another_visit_is_a_deviation():
    kitchen = Kitchen().until("fill")
    printed = {"round": "R-1", "route": "T-1", "purpose": "compliance"}
    kitchen.put(facts.BottleIssued(bottle="BOTTLE-1", visit="V-2", draw=1, **printed), log="desk")
    kitchen.obey()

    (found,) = kitchen.where().deviations
    assert (found.kind, found.values["printed_for"]) == ("wrong-bottle", "V-2")


def test_one_bottle_for_two_draws_is_a_deviation_of_both():
    kitchen = Kitchen("first-and-fifth", PAIR, bottles=lambda draw: "ONE")
    kitchen.walk()

    assert kitchen.deviations() == [("filled-twice", (1, 5))]


def test_a_draw_filled_twice_keeps_the_first_filling():
    kitchen = Kitchen().until("fill")
    kitchen.obey()
    kitchen.record(facts.BottleFilled, bottle="SPARE", draw=1, fill="line")

    assert kitchen.deviations() == [("filled-twice", (1,))]
    assert kitchen.where().draws[0].bottle == "BOTTLE-1"


def test_a_litre_to_be_kept_that_was_poured_away_is_told():
    kitchen = Kitchen().until("fill")
    kitchen.record(facts.DrawPoured, draw=1, fill="line")

    assert kitchen.deviations() == [("poured-instead", (1,))]
    assert (kitchen.where().draws[0].state, kitchen.due.kind) == ("poured", "sign")


def test_a_tap_closed_and_opened_again_within_a_run_interrupted_the_flow():
    kitchen = Kitchen("first-and-fifth", PAIR).until("fill")
    kitchen.record(facts.TapClosed, draws=(1, 2, 3, 4, 5))
    kitchen.record(facts.TapOpened, draws=(1, 2, 3, 4, 5))
    kitchen.obey()

    assert kitchen.deviations() == [("interrupted-flow", (1, 5))]


def test_two_presses_of_opening_are_no_interruption():
    kitchen = Kitchen("first-and-fifth", PAIR).until("fill")
    kitchen.record(facts.TapOpened, draws=(1, 2, 3, 4, 5))
    kitchen.obey()

    assert kitchen.deviations() == []


def test_a_run_of_which_litres_are_missing_is_told_at_closing():
    kitchen = Kitchen("first-and-fifth", PAIR).until("fill")
    kitchen.record(facts.BottleFilled, bottle="BOTTLE-5", draw=5, fill="line")

    assert kitchen.deviations() == []
    assert kitchen.due.draws == (1, 2, 3, 4)
    kitchen.record(facts.VisitClosed, outcome="done")
    (found,) = kitchen.where().deviations
    assert (found.kind, found.values["missing"]) == ("wrong-order", (1, 2, 3, 4))


def test_questions_never_asked_are_told_at_closing():
    kitchen = Kitchen()
    kitchen.obey()
    kitchen.record(facts.BottleSet, bottle="B", draw=1, kind_="first-draw", purpose="compliance")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line")
    assert kitchen.deviations() == []

    kitchen.record(facts.VisitClosed, outcome="done")

    assert kitchen.kinds() == ["not-asked", "stand-unknown"]


def test_what_a_person_states_stands_beside_what_is_found():
    kitchen = Kitchen().until("sign")
    kitchen.record(facts.DeviationStated, step="draw-1", deviation="low-flow", reason="old tap")

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias, found.detected, found.reason) == (
        "low-flow",
        "low",
        False,
        "old tap",
    )


def test_what_is_found_and_stated_is_one_deviation_with_both_evidences():
    kitchen = Kitchen().until("fill")
    kitchen.obey(fill="below")
    stated = kitchen.record(
        facts.DeviationStated, step="draw-1", deviation="fill-below", draws=(1,), reason="cracked"
    )

    (found,) = kitchen.where().deviations
    assert (found.detected, found.reason) == (True, "cracked")
    assert stated.hash in found.evidence


def test_a_kind_that_a_newer_program_stated_may_bend_either_way():
    kitchen = Kitchen().until("sign")
    kitchen.record(facts.DeviationStated, step="draw-1", deviation="pipe-hammered")

    assert kitchen.where().deviations[0].bias == "either"


def test_a_corrected_fill_level_changes_the_deviation_and_not_the_time():
    kitchen = Kitchen().until("fill")
    kitchen.obey(fill="below")
    filled_at = kitchen.where().draws[0].filled_at
    kitchen.wait(hours=2)
    kitchen.correct(kitchen.entries[-1], fill="line")

    assert kitchen.deviations() == []
    assert kitchen.where().draws[0].filled_at == filled_at


def test_a_correction_without_the_time_of_the_act_accuses_nobody_of_a_wrong_order():
    kitchen = Kitchen().until("sign")
    setting = next(one for one in kitchen.entries if isinstance(one.fact, facts.BottleSet))
    kitchen.wait(minutes=5)
    kitchen.correct(setting, purpose="investigation", done_at="")

    assert kitchen.deviations() == []


def test_facts_of_another_visit_change_nothing():
    kitchen = Kitchen().until("fill")
    before = kitchen.where()
    kitchen.put(facts.BottleFilled(visit="V-2", bottle="X", draw=1, fill="below"))

    assert kitchen.where() == before
