"""The thirty-minute stand: water runs to waste, stands in the kitchen, two litres are drawn."""

from dataclasses import replace
from datetime import timedelta

import pytest

from fieldapp.domain import facts
from fieldapp.domain.protocols import find, read_protocol
from fieldapp.domain.recorded import Press
from fieldapp.domain.timetext import format_utc
from tests.domain.walking import Kitchen

MINUTE = timedelta(minutes=1)
TWO = ((1, "compliance"), (2, "compliance"))


def thirty() -> Kitchen:
    return Kitchen("thirty-minute", TWO)


def standing(**length: float) -> Kitchen:
    """Return a kitchen in which the water has run and has stood for so long."""
    return thirty().until("wait").wait(**length)


def test_an_ordinary_visit_runs_stands_and_fills_without_a_deviation():
    kitchen = thirty()

    assert kitchen.walk() == [
        "open", "ask", "ask", "ask", "ask", "ask", "run", "run", "wait", "set", "set", "tap",
        "fill", "ask", "sign", "close",
    ]  # fmt: skip
    assert kitchen.deviations() == []
    assert kitchen.where().stand.basis == "measured"
    assert kitchen.where().stand.shortest == 30 * MINUTE


# the run


def test_a_run_says_since_when_and_until_when_and_is_barred_before():
    kitchen = thirty().until("run")
    assert (kitchen.due.since, kitchen.due.until, kitchen.where().bars) == (None, None, ())
    kitchen.obey()
    kitchen.wait(minutes=3)

    due, (bar,) = kitchen.due, kitchen.where().bars
    assert (due.since, due.until) == (kitchen.at - 3 * MINUTE, kitchen.at + 2 * MINUTE)
    assert (bar.rule, bar.breach, bar.deviation) == ("run-too-short", "bar", "run-short")
    assert bar.values["ran"] == 3 * MINUTE
    kitchen.wait(minutes=2)
    assert kitchen.where().bars == ()


def test_a_clock_set_forward_makes_no_run_longer():
    kitchen = thirty().until("run")
    kitchen.obey()
    kitchen.wait(minutes=1)
    kitchen.at += 20 * MINUTE

    (bar,) = kitchen.where().bars
    assert bar.until == kitchen.at + 4 * MINUTE


def test_a_run_stated_as_short_goes_on_to_the_stand_once_the_tap_is_shut():
    kitchen = thirty().until("run")
    kitchen.obey()
    kitchen.wait(minutes=2)
    kitchen.record(facts.DeviationStated, step="run", deviation="run-short", reason="no more time")

    assert (kitchen.due.kind, kitchen.where().bars) == ("run", ())
    kitchen.record(facts.RunEnded, step="run")
    assert (kitchen.due.kind, kitchen.due.until) == ("wait", kitchen.at + 30 * MINUTE)
    kitchen.walk()
    assert kitchen.deviations() == [("run-short", (1, 2))]


def test_a_run_that_happened_before_the_tablet_was_at_hand_is_told_with_its_times():
    kitchen = thirty().until("run")
    opened, shut = kitchen.at - 12 * MINUTE, kitchen.at - 6 * MINUTE
    for kind, at in ((facts.RunStarted, opened), (facts.RunEnded, shut)):
        kitchen.record(kind, step="run", done_at=format_utc(at), basis="stated", told_by="sampler")

    assert (kitchen.due.kind, kitchen.due.since) == ("wait", shut)
    assert kitchen.due.until == shut + 30 * MINUTE
    assert kitchen.where().stand.basis == "stated"


def test_nothing_stands_while_the_water_has_yet_to_run():
    kitchen = thirty().until("run")
    kitchen.used(kitchen.at - 20 * MINUTE)
    assert (kitchen.where().stand, kitchen.where().earliest_draw) == (None, None)
    kitchen.obey()
    kitchen.wait(minutes=3)

    assert (kitchen.where().stand, kitchen.where().earliest_draw) == (None, None)


def test_of_a_tap_that_nobody_shut_before_the_draw_the_stand_is_not_sure():
    kitchen = thirty().until("run")
    kitchen.obey()
    kitchen.wait(minutes=45)
    kitchen.record(facts.TapOpened, draws=(1, 2))

    assert set(kitchen.kinds()) == {"run-short", "stand-doubtful"}
    assert kitchen.where().stand.shortest == timedelta(0)


# the stand


def test_the_half_hour_is_waited_for_here_and_barred_until_it_is_over():
    kitchen = standing(minutes=29)

    due, (bar,) = kitchen.due, kitchen.where().bars
    assert (due.kind, due.here, due.until) == ("wait", True, kitchen.at + MINUTE)
    assert (bar.breach, bar.deviation) == ("bar", "stand-short")
    assert kitchen.where().earliest_draw == due.until
    assert kitchen.wait(minutes=1).due.kind == "set"


def test_the_stand_before_a_first_litre_is_not_waited_for_here():
    kitchen = Kitchen().until("last-use")
    kitchen.used(kitchen.at - timedelta(hours=5))

    kitchen.until("wait")
    assert not kitchen.due.here


@pytest.mark.parametrize("gap", ["reload", "restart", "leave", "other device"])
def test_whatever_happens_in_the_wait_it_ends_at_the_same_time(gap):
    kitchen = standing(minutes=10)
    until = kitchen.due.until
    if gap == "restart":
        kitchen.restart()
    if gap == "leave":
        kitchen.record(facts.VisitLeft, why="waiting")
        assert kitchen.where().earliest_draw == until
        kitchen.wait(minutes=5)
        kitchen.record(facts.VisitResumed)
    if gap == "other device":
        kitchen.log, kitchen.boot, kitchen.mono = "log-b", "boot-b", 7

    assert (kitchen.due.kind, kitchen.due.until) == ("wait", until)
    kitchen.wait(seconds=(until - kitchen.at).total_seconds())
    assert kitchen.due.kind == "set"


def test_water_used_in_the_half_hour_begins_it_anew_and_is_no_deviation():
    kitchen = standing(minutes=20)
    kitchen.used(kitchen.at - 2 * MINUTE, where="toilet")

    assert kitchen.due.until == kitchen.at + 28 * MINUTE
    kitchen.walk()
    assert kitchen.deviations() == []
    assert kitchen.where().stand.basis == "stated"


def test_water_used_in_the_half_hour_and_drawn_all_the_same_is_short():
    kitchen = standing(minutes=29)
    kitchen.used(kitchen.at - 2 * MINUTE, where="toilet")
    kitchen.wait(minutes=1)
    kitchen.record(facts.TapOpened, draws=(1, 2))

    assert ("stand-short", (1, 2)) in kitchen.deviations()


def test_water_of_which_the_resident_tells_after_the_draw_is_a_deviation():
    kitchen = thirty().until("ask", question="quiet-kept")
    kitchen.used(kitchen.at - 10 * MINUTE, where="toilet")
    assert ("tap-used-in-stand", (1, 2)) in kitchen.deviations()


def test_a_yes_after_the_draw_says_that_water_ran_in_the_stand():
    kitchen = thirty().until("ask", question="quiet-kept")
    kitchen.obey("yes")

    assert kitchen.deviations() == [("tap-used-in-stand", (1, 2))]


def test_a_corrected_draw_is_read_by_the_clock_of_the_press_it_corrects():
    run_on = '[step.fill]\ndraw = 2\nvolume_ml = 1000\nkind = "standing"\nrunning_on = true\n'
    document = find("thirty-minute").toml.replace(run_on, run_on.replace("running_on = true\n", ""))
    kitchen = Kitchen("thirty-minute", TWO, document=read_protocol(document)).until("fill")
    kitchen.obey()
    filled = next(e for e in kitchen.entries if isinstance(e.fact, facts.BottleFilled))
    before = kitchen.where().stand
    assert before.basis == "measured"
    kitchen.wait(hours=2).restart()
    made = kitchen.correct(filled, fill="below")
    assert kitchen.where().stand.basis == "stated"  # of an entry that is not here
    kitchen.withdraw(made)
    press = Press(filled.log, filled.seq, filled.at, filled.off, filled.mono, filled.boot)
    kitchen.entries.append(replace(made, stands_for=press))

    assert kitchen.where().stand == before
    assert kitchen.kinds() == ["fill-below"]


@pytest.mark.parametrize(("minutes", "due"), [(60, "set"), (61, "ask")])
def test_above_an_hour_it_is_asked_whether_to_draw(minutes, due):
    kitchen = standing(minutes=minutes)

    assert kitchen.due.kind == due
    if due == "ask":
        assert (kitchen.due.question, kitchen.due.answers[0]) == ("stand-long", "draw-now")
        assert kitchen.due.source


@pytest.mark.parametrize("milliseconds", [-3, -1, 1, 3, 400])
def test_a_counter_read_a_moment_after_the_clock_does_not_move_the_end_of_a_wait(milliseconds):
    kitchen = standing(minutes=10)
    until = kitchen.due.until
    kitchen.mono += milliseconds

    assert kitchen.due.until == until
    assert kitchen.where().stand.basis == "measured"


def test_a_clock_that_runs_behind_by_seconds_is_not_believed_against_the_counter():
    kitchen = standing(minutes=10)
    until = kitchen.due.until
    kitchen.mono += 7_000

    assert kitchen.due.until == until - timedelta(seconds=7)
