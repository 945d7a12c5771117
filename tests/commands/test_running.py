"""Water to waste and the stand inside a visit: pressed, told afterwards, too short."""

from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest

from fieldapp.commands import running
from fieldapp.commands.asked import NotYet
from fieldapp.commands.last_use import CrossedTimes
from fieldapp.domain.errors import NotDue, StepOver
from tests.tap import HERE, VISIT, Tap

MINUTE = timedelta(minutes=1)


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT])
    made.thirty()
    made.until(HERE, "run")
    yield made
    made.store.close()


def test_a_run_is_opened_shut_and_followed_by_the_stand(tap: Tap):
    tap.press(running.start_run, HERE)
    tap.clock.pass_by(minutes=5)
    tap.press(running.end_run, HERE)

    due = tap.standing(HERE).due
    assert (due.kind, due.here) == ("wait", True)
    assert tap.kinds(HERE)[-2:] == ["run.started", "run.ended"]


def test_a_run_is_not_opened_twice(tap: Tap):
    tap.press(running.start_run, HERE)
    with pytest.raises(StepOver):
        tap.press(running.start_run, HERE)


def test_a_tap_that_nobody_opened_is_not_shut(tap: Tap):
    with pytest.raises(NotDue):
        tap.press(running.end_run, HERE)


def test_a_run_shut_too_early_is_recorded_with_its_deviation_when_it_stays_so(tap: Tap):
    tap.press(running.start_run, HERE)
    tap.clock.pass_by(minutes=2)
    tap.press(running.run_happened, HERE, reason="the sink was full")

    assert tap.kinds(HERE)[-2:] == ["run.ended", "deviation.stated"]
    assert tap.standing(HERE).due.kind == "wait"
    (said,) = tap.facts(HERE, "deviation.stated")
    assert (said.deviation, said.step) == ("run-short", "run")


def test_a_run_that_was_shut_too_early_may_be_all_there_was(tap: Tap):
    tap.press(running.start_run, HERE)
    tap.clock.pass_by(minutes=2)
    tap.press(running.end_run, HERE)
    assert tap.standing(HERE).due.kind == "run"
    tap.press(running.run_happened, HERE)

    assert tap.kinds(HERE)[-1] == "deviation.stated"
    assert tap.standing(HERE).due.kind == "wait"


def test_a_run_before_the_tablet_was_at_hand_is_told_with_both_times(tap: Tap):
    opened = tap.clock.at - 10 * MINUTE
    tap.press(running.run_happened, HERE, opened=opened, shut=opened + 6 * MINUTE)

    due = tap.standing(HERE).due
    assert (due.kind, due.since) == ("wait", opened + 6 * MINUTE)
    assert tap.facts(HERE, "deviation.stated") == []
    assert {one.basis for one in tap.facts(HERE, "run.ended")} == {"stated"}


@pytest.mark.parametrize(
    ("opened", "shut", "rule"),
    [
        (None, None, running.RunUnsaid),
        (-10, None, running.RunUnsaid),
        (None, -5, running.RunUnsaid),
        (-5, -10, CrossedTimes),
        (-5, 10, NotYet),
    ],
)
def test_a_run_told_without_good_times_is_not_recorded(tap: Tap, opened, shut, rule):
    times = [None if one is None else tap.clock.at + one * MINUTE for one in (opened, shut)]
    with pytest.raises(rule):
        tap.press(running.run_happened, HERE, opened=times[0], shut=times[1])
    assert "run.started" not in tap.kinds(HERE)


def test_a_visit_without_a_run_has_none_that_happened(tap: Tap):
    tap.begin(VISIT)
    with pytest.raises(NotDue):
        tap.press(running.run_happened, VISIT)
