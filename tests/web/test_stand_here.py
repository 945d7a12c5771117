"""The pages of a thirty-minute stand: the run, the wait, the ways beside each bar, the board."""

import re
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest

from fieldapp.commands import kitchen, last_use, running
from fieldapp.domain.facts import BottleVoided
from tests.tap import HERE, OTHER, SAMPLER, VISIT, Tap
from tests.web.reader import Reader, words

MINUTE = timedelta(minutes=1)


def path(more: str = "", visit: str = HERE) -> str:
    return f"/kitchen/visits/{visit}{more}"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.thirty()
    made.name_sampler()
    yield made
    made.store.close()


@pytest.fixture
def sampler(tap: Tap) -> Reader:
    return Reader(tap, SAMPLER)


def wait(tap: Tap, sampler: Reader) -> str:
    """Bring the visit into its half hour through the pages; return the page of the wait."""
    tap.until(HERE, "run")
    sampler.land(path(), path("/run"), run="start")
    tap.clock.pass_by(minutes=5)
    return sampler.land(path(), path("/run"), run="end")


def test_the_run_counts_down_rings_and_has_its_three_ways(tap: Tap, sampler: Reader):
    tap.until(HERE, "run")
    sampler.land(path(), path("/run"))
    page = sampler.read(path())

    assert "data-ring" in page
    assert "data-awake" in page
    assert "Leave, come back later" in page
    assert path("/done") in page
    assert path("/run") not in page  # too early to press that it is shut
    tap.clock.pass_by(minutes=5)
    assert "It has run long enough" in sampler.read(path())


def test_a_run_that_was_too_short_is_told_on_its_own_page(tap: Tap, sampler: Reader):
    tap.until(HERE, "run")
    sampler.land(path(), path("/run"))
    tap.clock.pass_by(minutes=2)
    page = sampler.land(path("/done"), path("/ran"), reason="the sink was full")

    assert "Wait" in words(page)
    assert tap.kinds(HERE)[-2:] == ["run.ended", "deviation.stated"]


def test_a_run_told_with_crossed_times_is_asked_again_with_what_was_typed(
    tap: Tap, sampler: Reader
):
    tap.until(HERE, "run")
    answer = sampler.send(
        path("/done"), path("/ran"),
        opened_local="2027-05-04T05:50", shut_local="2027-05-04T05:40",
    )  # fmt: skip

    assert answer.status_code == 422
    assert "later than the second" in words(answer.text)
    assert 'value="2027-05-04T05:50"' in answer.text


def test_the_half_hour_is_a_wait_and_no_reproach(tap: Tap, sampler: Reader):
    page = wait(tap, sampler)
    said = words(page)

    assert "Wait" in said
    assert "Too early" not in said
    assert "Leave every tap shut" in said
    assert f"Go on with {VISIT} meanwhile" in said
    assert "It is already done" in said
    assert "Water ran again" in said
    assert "data-ring" in page
    assert "data-awake" in page


def test_a_reload_a_second_tab_and_a_while_later_the_wait_ends_at_the_same_time(
    tap: Tap, sampler: Reader
):
    until = re.findall(r'data-until="([^"]+)"', wait(tap, sampler))[0]
    tap.clock.pass_by(minutes=11)
    second = Reader(tap, SAMPLER)

    for page in (sampler.read(path()), second.read(path())):
        assert re.findall(r'data-until="([^"]+)"', page)[0] == until


def test_the_board_shows_each_waiting_visit_and_the_next_to_ring_first(tap: Tap, sampler: Reader):
    wait(tap, sampler)
    sampler.land(path(), path("/leave"))
    tap.begin(VISIT, hours=5)
    tap.press(kitchen.leave_visit, VISIT, why="waiting")
    said = words(sampler.read("/kitchen/"))

    assert f"Next to ring: {HERE}" in said
    assert f"Then: {VISIT}" in said
    assert f"Go to {OTHER}" in said


def test_a_visit_that_waits_without_having_been_left_rings_on_the_board_too(
    tap: Tap, sampler: Reader
):
    wait(tap, sampler)
    said = words(sampler.read("/kitchen/"))

    assert f"Next to ring: {HERE}" in said
    assert f"Go to {VISIT}" in said


def test_water_that_ran_again_a_moment_ago_is_one_chip_and_begins_the_half_hour_anew(
    tap: Tap, sampler: Reader
):
    wait(tap, sampler)
    tap.clock.pass_by(minutes=20)
    page = sampler.read(path("/last-use"))
    chip = re.search(r'name="at" value="([^"]+)"[^>]*>\s*<label[^>]*>\s*5 min ago', page)
    assert chip
    sampler.land(
        path("/last-use"), path("/last-use"), at=chip[1], exact="at", where="toilet", said="yes"
    )

    due = tap.standing(HERE).due
    assert due.kind == "wait"
    left = due.until - tap.clock.at
    assert 24 * MINUTE < left < 26 * MINUTE


def test_while_the_water_has_yet_to_run_the_board_knows_no_earliest_draw(tap: Tap, sampler: Reader):
    tap.until(HERE, "run")
    tap.press(running.start_run, HERE)
    with tap.pages() as pages:
        assert pages.visit(HERE)["earliest_draw"] == ""
    assert "Next to ring" not in words(sampler.read("/kitchen/"))


# the three ways beside a bar (R1), and what was different


def ways(page: str, visit: str) -> list[str]:
    """Return which of leave and already done a page offers."""
    return [way for way in ("/leave", "/done") if path(way, visit) in page]


def test_a_doubt_offers_to_wait_to_leave_and_that_it_is_done(tap: Tap, sampler: Reader):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    used = tap.clock.at - timedelta(hours=6.1)
    tap.press(last_use.state_last_use, VISIT, exact="about", at=used, where="bath")
    while (due := tap.standing(VISIT).due).question != "stand-doubt":
        tap.press(kitchen.answer, VISIT, question=due.question, answer=due.answers[0])
    page = sampler.read(path(visit=VISIT))

    assert "Wait until it is sure" in words(page)
    assert ways(page, VISIT) == ["/leave", "/done"]


def test_a_bottle_out_of_use_offers_another_to_leave_and_that_it_is_done(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    tap.record(BottleVoided(bottle=tap.codes[VISIT], why="broken"))
    answer = sampler.send(path(visit=VISIT), path("/set", VISIT), code=tap.codes[VISIT])
    page = answer.get_data(as_text=True)

    assert answer.status_code == 422
    assert "Take another bottle" in words(page)
    assert ways(page, VISIT) == ["/leave", "/done"]


def test_a_run_too_short_and_a_wait_offer_their_ways(tap: Tap, sampler: Reader):
    tap.until(HERE, "run")
    assert ways(sampler.land(path(), path("/run")), HERE) == ["/leave", "/done"]
    tap.clock.pass_by(minutes=5)
    assert ways(sampler.land(path(), path("/run")), HERE) == ["/leave", "/done"]


def test_an_answer_that_ended_the_visit_may_come_after_the_draw(tap: Tap, sampler: Reader):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="refused")
    assert "/done" in ways(sampler.read(path(visit=VISIT)), VISIT)


def test_what_is_different_is_offered_with_its_direction_and_shown_with_its_reason(
    tap: Tap, sampler: Reader
):
    tap.begin(VISIT)
    here = path("/different", VISIT)
    assert "Only a thin stream · reads low" in words(sampler.read(here))
    sampler.land(here, here, deviation="low-flow", reason="the valve sticks")

    said = words(sampler.read(here))
    assert "slower than a glass is filled (bends the result low)" in said
    assert "the valve sticks" in said


def test_of_a_closed_visit_no_words_are_shown(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    tap.press(kitchen.state_deviation, VISIT, kind="low-flow", reason="the valve sticks")
    tap.finish(VISIT)

    page = sampler.read(path(visit=VISIT))
    assert "slower than a glass is filled" in words(page)
    assert "the valve sticks" not in page
