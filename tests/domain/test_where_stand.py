"""The stand before the first draw: barred, asked, measured, and never quietly too short."""

from datetime import timedelta

import pytest

from fieldapp.domain import facts
from fieldapp.domain.timetext import to_utc
from tests.domain.walking import PAIR, Kitchen

HOUR = timedelta(hours=1)
MINUTE = timedelta(minutes=1)


def asked(length: timedelta, unsure: timedelta = timedelta(0)) -> Kitchen:
    """Return a kitchen at the stand, the last use stated as between two instants."""
    kitchen = Kitchen().until("last-use")
    kitchen.used(kitchen.at - length, kitchen.at - length + unsure, exact="between")
    for question in ("tap", "filter", "aerator", "plumbing-work"):
        kitchen.until("ask", question=question).obey()
    return kitchen


@pytest.mark.parametrize(
    ("length", "due", "question", "verdict"),
    [
        (5 * HOUR + 59 * MINUTE, "wait", "", "fails"),
        (6 * HOUR, "set", "", "passes"),
        (6 * HOUR + MINUTE, "set", "", "passes"),
        (18 * HOUR, "set", "", "passes"),
        (18 * HOUR + MINUTE, "ask", "stand-long", "long"),
    ],
)
def test_six_hours_is_enough_and_above_eighteen_is_asked(length, due, question, verdict):
    kitchen = asked(length)

    standing = kitchen.where()
    assert (standing.due.kind, standing.due.question) == (due, question)
    assert standing.stand_verdict == verdict
    assert standing.deviations == ()


def test_a_short_stand_names_since_when_until_when_and_what_may_be_done():
    kitchen = asked(5 * HOUR + 20 * MINUTE)

    due, (bar,) = kitchen.due, kitchen.where().bars
    assert due.since == kitchen.at - 5 * HOUR - 20 * MINUTE
    assert due.until == bar.until == kitchen.where().earliest_draw == kitchen.at + 40 * MINUTE
    assert (bar.rule, bar.breach, bar.deviation) == ("stand-too-short", "ask", "stand-short")
    assert bar.values["shortest"] == 5 * HOUR + 20 * MINUTE


def test_the_earliest_draw_is_known_as_soon_as_the_last_use_is():
    kitchen = Kitchen().until("last-use")
    assert kitchen.where().earliest_draw is None
    kitchen.used(kitchen.at - 5 * HOUR)

    assert kitchen.due.question == "tap"
    assert kitchen.where().earliest_draw == kitchen.at + HOUR


def test_the_wait_is_over_at_the_instant_it_names():
    kitchen = asked(5 * HOUR)
    until = kitchen.due.until

    kitchen.wait(seconds=3599)
    assert (kitchen.due.kind, kitchen.due.until) == ("wait", until)
    kitchen.wait(seconds=1)
    assert kitchen.due.kind == "set"


def test_a_wait_outlives_leaving_and_a_restart():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.VisitLeft, why="waiting")
    kitchen.wait(minutes=59).restart()
    assert kitchen.where().earliest_draw == kitchen.at + MINUTE
    kitchen.obey()

    assert kitchen.due.kind == "wait"
    kitchen.wait(minutes=1)
    assert kitchen.due.kind == "set"


def test_it_is_already_done_lifts_the_bar_and_stays_a_deviation():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.DeviationStated, step="stand", deviation="stand-short", reason="in a rush")
    assert (kitchen.due.kind, kitchen.where().bars) == ("set", ())

    kitchen.walk()

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias, found.draws) == ("stand-short", "low", (1,))
    assert (found.detected, found.reason) == (True, "in a rush")
    assert found.values["shortest"] < 6 * HOUR


def test_a_stand_stated_short_stays_stated_when_the_water_stood_on():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.DeviationStated, step="draw-1", deviation="stand-short")
    kitchen.wait(hours=2)
    kitchen.walk()

    (found,) = kitchen.where().deviations
    assert (found.kind, found.detected) == ("stand-short", False)


def test_a_bottle_filled_too_early_is_recorded_and_nothing_is_barred_any_more():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.BottleSet, bottle="B", draw=1, kind_="first-draw", purpose="compliance")
    assert kitchen.due.kind == "wait"
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line")

    assert (kitchen.due.kind, kitchen.where().bars) == ("sign", ())
    assert kitchen.deviations() == [("stand-short", (1,))]
    assert kitchen.where().stand.shortest == 5 * HOUR


def test_a_tap_opened_too_early_is_a_draw_that_has_begun():
    kitchen = Kitchen("first-and-fifth", PAIR, last_use=5 * HOUR).until("wait")
    kitchen.record(facts.TapOpened, draws=(1, 2, 3, 4, 5))

    assert kitchen.due.kind == "set"
    assert kitchen.where().stand.shortest == 5 * HOUR
    kitchen.walk()
    assert kitchen.deviations()[0] == ("stand-short", (1, 5))


def test_a_later_use_begins_the_stand_anew():
    kitchen = asked(7 * HOUR)
    assert kitchen.due.kind == "set"
    kitchen.used(kitchen.at - HOUR, where="garden")

    assert kitchen.due.kind == "wait"
    assert kitchen.where().earliest_draw == kitchen.at + 5 * HOUR


def test_an_earlier_use_told_later_changes_nothing():
    kitchen = asked(7 * HOUR)
    kitchen.used(kitchen.at - 9 * HOUR)

    assert kitchen.where().stand.shortest == 7 * HOUR


def test_a_later_use_bars_again_what_was_excused_before():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.DeviationStated, step="stand", deviation="stand-short")
    kitchen.used(kitchen.at - MINUTE)

    assert kitchen.due.kind == "wait"


@pytest.mark.parametrize("told", [((9, 7), (8, 8)), ((8, 8), (9, 7))])
def test_two_vague_uses_give_the_bounds_of_the_later_one(told):
    kitchen = Kitchen().until("last-use")
    for earliest, latest in told:
        kitchen.used(kitchen.at - earliest * HOUR, kitchen.at - latest * HOUR, exact="between")

    stand = kitchen.where().stand
    assert (stand.shortest, stand.longest) == (7 * HOUR, 8 * HOUR)


def test_a_doubtful_stand_is_asked_and_waiting_resolves_it():
    kitchen = asked(7 * HOUR, unsure=2 * HOUR)
    assert kitchen.where().stand_verdict == "ask"
    assert (kitchen.due.question, kitchen.due.answers) == ("stand-doubt", ("wait", "draw-now"))

    kitchen.obey("wait")
    assert (kitchen.due.kind, kitchen.due.until) == ("wait", kitchen.at + HOUR)
    kitchen.wait(hours=1)
    assert kitchen.due.kind == "set"
    kitchen.walk()
    assert kitchen.deviations() == []


def test_a_doubtful_stand_drawn_at_once_is_a_deviation_that_says_so():
    kitchen = asked(7 * HOUR, unsure=2 * HOUR)
    kitchen.obey("draw-now")
    assert kitchen.due.kind == "set"
    kitchen.walk()

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias) == ("stand-doubtful", "low")


def test_who_waits_may_still_draw_at_once():
    kitchen = asked(7 * HOUR, unsure=2 * HOUR)
    kitchen.obey("wait")
    kitchen.answer("stand-doubt", "draw-now")

    assert kitchen.due.kind == "set"


def test_an_answer_about_one_stand_does_not_hold_for_the_next():
    kitchen = asked(7 * HOUR, unsure=2 * HOUR)
    kitchen.obey("draw-now")
    kitchen.used(kitchen.at - 7 * HOUR, kitchen.at - 4 * HOUR, exact="between")

    assert kitchen.due.question == "stand-doubt"


def test_a_long_stand_may_be_drawn_or_put_off():
    put_off, drawn = asked(20 * HOUR), asked(20 * HOUR)

    put_off.obey("another-day")
    assert (put_off.due.kind, put_off.where().stopped) == ("close", "another-day")

    drawn.obey("draw-now")
    drawn.walk()
    (found,) = drawn.where().deviations
    assert (found.kind, found.bias) == ("stand-long", "high")


def test_a_stand_that_may_be_too_short_and_may_be_too_long_bends_either_way():
    kitchen = asked(20 * HOUR, unsure=18 * HOUR)
    kitchen.obey("draw-now")
    kitchen.walk()

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias) == ("stand-unknown", "either")


def unknown(kitchen: Kitchen):
    return kitchen.record(facts.WaterUsed, from_="", to="", exact="unknown", where="")


def test_a_last_use_that_nobody_knows_is_asked_about():
    kitchen = Kitchen().until("last-use")
    unknown(kitchen)
    for question in ("tap", "filter", "aerator", "plumbing-work"):
        kitchen.until("ask", question=question).obey()

    standing = kitchen.where()
    assert (standing.stand, standing.stand_verdict) == (None, "ask")
    assert standing.due.question == "stand-doubt"
    kitchen.obey("draw-now")
    kitchen.walk()
    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias) == ("stand-unknown", "either")


def test_who_waits_after_an_unknown_use_waits_the_whole_minimum():
    kitchen = Kitchen().until("last-use")
    unknown(kitchen)
    kitchen.until("ask", question="stand-doubt").obey("wait")

    assert kitchen.due.until == kitchen.at + 6 * HOUR
    kitchen.wait(hours=6)
    assert kitchen.due.kind == "set"


def test_somebody_who_knows_answers_somebody_who_does_not():
    kitchen = Kitchen().until("last-use")
    unknown(kitchen)
    kitchen.used(kitchen.at - 8 * HOUR)

    assert kitchen.where().stand_verdict == "passes"
    kitchen.walk()
    assert kitchen.deviations() == []


def test_a_use_that_nobody_knows_after_one_that_was_stated_is_a_doubt():
    kitchen = Kitchen().until("last-use")
    kitchen.used(kitchen.at - 8 * HOUR)
    unknown(kitchen)

    assert kitchen.where().stand_verdict == "ask"


def test_the_toilet_at_five_told_after_the_draw_is_never_refused():
    kitchen = Kitchen().until("sign")
    assert kitchen.deviations() == []
    used = kitchen.used(kitchen.at - HOUR, where="toilet")

    (found,) = kitchen.where().deviations
    assert (found.kind, found.bias, found.detected) == ("tap-used-in-stand", "low", True)
    assert used.hash in found.evidence
    assert kitchen.where().stand_verdict == "fails"
    assert kitchen.due.kind == "sign"
    kitchen.walk()
    assert kitchen.kinds() == ["tap-used-in-stand"]


def test_a_use_told_late_that_leaves_enough_stand_is_no_deviation():
    kitchen = Kitchen(last_use=9 * HOUR).until("sign")
    kitchen.used(kitchen.at - 7 * HOUR)

    assert kitchen.deviations() == []
    assert kitchen.where().stand_verdict == "passes"


def test_a_use_after_the_draw_does_not_touch_the_stand():
    kitchen = Kitchen().until("sign")
    kitchen.wait(minutes=10)
    kitchen.used(kitchen.at - 5 * MINUTE)

    assert kitchen.deviations() == []
    assert kitchen.where().stand_verdict == "passes"


def test_what_was_short_stays_short_when_more_is_told():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")
    kitchen.used(kitchen.at - HOUR)

    assert kitchen.kinds() == ["stand-short", "tap-used-in-stand"]


def test_an_older_use_told_after_a_short_draw_accuses_nobody_of_using_the_tap():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")
    kitchen.used(kitchen.at - 9 * HOUR)

    assert kitchen.kinds() == ["stand-short"]


def test_closing_the_tap_after_a_run_is_no_use_before_it():
    kitchen = Kitchen("first-and-fifth", PAIR).until("tap")
    kitchen.record(facts.TapClosed, draws=(1, 2, 3, 4, 5))
    kitchen.obey()
    kitchen.record(facts.BottleFilled, bottle="BOTTLE-1", draw=1, fill="line")

    assert kitchen.where().stand.shortest == 8 * HOUR
    assert "stand-short" not in kitchen.kinds()


def test_a_use_taken_back_takes_its_deviation_with_it():
    kitchen = Kitchen().until("sign")
    used = kitchen.used(kitchen.at - HOUR)
    assert kitchen.kinds() == ["tap-used-in-stand"]
    kitchen.withdraw(used)

    assert kitchen.kinds() == []


def test_a_last_use_asked_only_after_the_draw_is_judged_as_any_other():
    kitchen = Kitchen(last_use=3 * HOUR).until("last-use")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")
    assert kitchen.due.kind == "last-use"
    kitchen.obey()

    assert kitchen.kinds() == ["stand-short"]


def test_a_use_stated_for_after_a_draw_that_was_pressed_is_a_contradiction():
    kitchen = Kitchen().until("last-use")
    kitchen.used(kitchen.at + HOUR)
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")

    assert kitchen.kinds() == ["stand-unknown"]


def test_a_draw_typed_in_later_ends_the_stand_when_it_was_done():
    kitchen = Kitchen(last_use=8 * HOUR).until("set")
    kitchen.wait(hours=2)
    kitchen.used(kitchen.at - HOUR)
    kitchen.record(
        facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident",
        done_at="2027-05-04T12:10:00.000Z", basis="paper", writer="sampler-1",
    )  # fmt: skip

    assert kitchen.deviations() == []
    assert kitchen.where().stand.shortest == 8 * HOUR + 10 * MINUTE


def pressed(kitchen: Kitchen) -> Kitchen:
    """Shut the last tap here, by a press, where the last use would be asked."""
    kitchen.until("last-use").record(facts.StandStarted)
    for question in ("tap", "filter", "aerator", "plumbing-work"):
        kitchen.until("ask", question=question).obey()
    return kitchen


def test_a_stand_pressed_here_is_measured():
    kitchen = pressed(Kitchen())
    assert (kitchen.due.kind, kitchen.due.until) == ("wait", kitchen.at + 6 * HOUR)
    kitchen.wait(hours=6)

    standing = kitchen.where()
    assert (standing.due.kind, standing.stand.basis) == ("set", "measured")
    assert standing.stand.shortest == standing.stand.longest == 6 * HOUR


def test_a_stand_over_a_restart_is_clocked_give_or_take_the_offset():
    kitchen = pressed(Kitchen(options={"offset_bound": timedelta(seconds=30)}))
    kitchen.wait(hours=6).restart()

    standing = kitchen.where()
    assert (standing.stand.basis, standing.stand_verdict) == ("clocked", "ask")
    kitchen.obey("wait")
    assert kitchen.due.until == kitchen.at + timedelta(seconds=30)
    kitchen.wait(seconds=30)
    assert kitchen.due.kind == "set"


def test_a_clock_set_forward_during_the_stand_does_not_shorten_it():
    # computation: wall 6:20, counter 5:35; the stand is between, so somebody is asked
    kitchen = pressed(Kitchen())
    kitchen.wait(hours=5, minutes=35)
    kitchen.at += 45 * MINUTE

    standing = kitchen.where()
    assert (standing.stand.shortest, standing.stand.longest) == (
        5 * HOUR + 35 * MINUTE,
        6 * HOUR + 20 * MINUTE,
    )
    assert standing.due.question == "stand-doubt"


def test_a_use_after_the_press_makes_the_stand_stated_again():
    kitchen = pressed(Kitchen())
    kitchen.wait(hours=7)
    kitchen.used(kitchen.at - HOUR)

    assert kitchen.where().stand.basis == "stated"
    assert kitchen.due.kind == "wait"


def test_a_metered_use_says_so():
    kitchen = Kitchen().until("last-use")
    kitchen.used(kitchen.at - 7 * HOUR, known_by="metered")

    assert kitchen.where().stand.basis == "metered"


@pytest.mark.parametrize(
    ("zone", "used", "drawn", "fold", "due"),
    [
        # computation 7.1: the wall says 6:30, the water stood 5:30
        ("America/Boise", "2026-03-07T22:00", "2026-03-08T04:30", None, "wait"),
        ("Europe/Berlin", "2026-03-28T23:00", "2026-03-29T05:30", None, "wait"),
        # the wall says 5:30, the water stood 6:30
        ("America/Boise", "2026-10-31T22:00", "2026-11-01T03:30", None, "set"),
        ("Europe/Berlin", "2026-10-24T23:00", "2026-10-25T04:30", None, "set"),
        # half an hour: 6:15 and 5:45
        ("Australia/Lord_Howe", "2026-04-04T22:00", "2026-04-05T03:45", None, "set"),
        ("Australia/Lord_Howe", "2026-10-03T22:00", "2026-10-04T04:15", None, "wait"),
        # the wall says 17:30, the water stood 18:30
        ("America/Boise", "2026-10-31T12:30", "2026-11-01T06:00", None, "ask"),
        ("America/Phoenix", "2026-03-07T22:00", "2026-03-08T04:30", None, "set"),
    ],
)
def test_the_night_the_clocks_change_counts_the_hours_the_water_stood(zone, used, drawn, fold, due):
    kitchen = Kitchen(at=to_utc(drawn, zone, fold)).until("last-use")
    kitchen.used(to_utc(used, zone))
    for question in ("tap", "filter", "aerator", "plumbing-work"):
        kitchen.until("ask", question=question).obey()

    assert kitchen.due.kind == due


def test_the_earliest_draw_of_a_night_with_a_clock_change_is_six_true_hours_on():
    # computation 7.1: 22:00 + 6 h is 05:00, not 04:00; and in autumn 03:00
    kitchen = Kitchen(at=to_utc("2026-03-08T04:30", "America/Boise")).until("last-use")
    kitchen.used(to_utc("2026-03-07T22:00", "America/Boise"))

    assert kitchen.where().earliest_draw == to_utc("2026-03-08T05:00", "America/Boise")


def test_a_press_after_the_draw_does_not_say_when_water_ran_before_it():
    kitchen = Kitchen(last_use=3 * HOUR).until("last-use")
    kitchen.record(facts.BottleFilled, bottle="B", draw=1, fill="line", who_drew="resident")
    kitchen.record(facts.StandStarted)

    assert kitchen.due.kind == "last-use"
    kitchen.obey()
    assert kitchen.kinds() == ["stand-short"]


def test_once_drawn_there_is_no_earliest_draw_any_more():
    kitchen = Kitchen().until("fill")
    assert kitchen.where().earliest_draw == kitchen.at - 2 * HOUR
    kitchen.obey()

    assert kitchen.where().earliest_draw is None


def test_a_visit_closed_without_its_draw_has_no_stand():
    kitchen = asked(5 * HOUR)
    kitchen.record(facts.VisitClosed, outcome="not-possible")
    kitchen.wait(hours=9)

    standing = kitchen.where()
    assert (standing.stand, standing.stand_verdict, standing.earliest_draw) == (None, "", None)
    assert standing.deviations == ()


@pytest.mark.parametrize(("slow", "question"), [(5, ""), (30, "stand-doubt")])
def test_an_answer_on_a_tablet_that_is_some_minutes_slow_holds(slow, question):
    kitchen = asked(7 * HOUR, unsure=2 * HOUR)
    kitchen.log = "log-b"
    kitchen.at -= slow * MINUTE
    kitchen.obey("draw-now")

    assert kitchen.due.question == question
