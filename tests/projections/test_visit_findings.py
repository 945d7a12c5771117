"""Findings of the draws: a stand too short, two bottles filled in each other's place."""

import random
import sqlite3
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest

from fieldapp import projections
from fieldapp.commands import desk, drawing, kitchen, last_use
from fieldapp.domain.facts import DeviationStated, EntryWithdrawn
from fieldapp.projections import plans
from fieldapp.projections.tables import make_tables
from tests import nodes
from tests.tap import OTHER, VISIT, Tap

THIRD = "Q-0403"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER, THIRD])
    yield made
    made.store.close()


def fill_with(tap: Tap, visit: str, code: str, *, hours: float = 8) -> None:
    """Fill the one draw of a visit with a bottle that was printed for another, and close."""
    tap.begin(visit, hours=hours)
    drawn = [drawing.Drawn(1, code=code)]
    tap.press(drawing.already_done, visit, drawn=drawn, deviation="wrong-bottle")
    tap.press(kitchen.sign, visit, name="Imaginary Sampler", close=True)


def swap(tap: Tap) -> None:
    fill_with(tap, VISIT, tap.codes[OTHER])
    fill_with(tap, OTHER, tap.codes[VISIT])


def findings(tap: Tap) -> list:
    with tap.pages() as pages:
        return pages.findings(tap.clock.at)


def deviations(tap: Tap, visit: str) -> list[str]:
    with tap.pages() as pages:
        return [one["kind"] for one in pages.visit(visit)["deviations"]]


# swapped (R26)


def test_two_bottles_in_each_others_place_are_one_finding(tap: Tap):
    swap(tap)

    (found,) = findings(tap)
    assert found["kind"] == "bottles-swapped"
    first = min(tap.codes[VISIT], tap.codes[OTHER])
    printed, filled = (VISIT, OTHER) if first == tap.codes[VISIT] else (OTHER, VISIT)
    assert found["about"] == f"bottle:{first}"
    assert (found["says"]["printed"], found["says"]["filled"]) == (printed, filled)
    assert len(found["evidence"]) == 2


def test_the_result_of_a_swapped_bottle_follows_where_it_was_filled(tap: Tap):
    swap(tap)

    with tap.pages() as pages:
        row = pages.bottle(tap.codes[OTHER])
    assert (row["visit"], row["site"], row["draw"]) == (VISIT, VISIT, 1)
    assert (row["purpose"], row["kind"]) == ("compliance", "first-draw")
    assert row["analyse"] == ["lead", "copper"]
    assert deviations(tap, VISIT) == deviations(tap, OTHER) == ["wrong-bottle"]


def test_a_bottle_alone_of_elsewhere_is_a_deviation_and_no_finding(tap: Tap):
    fill_with(tap, VISIT, tap.codes[OTHER])

    assert findings(tap) == []
    assert deviations(tap, VISIT) == ["wrong-bottle"]


def test_three_bottles_in_a_round_of_places_are_no_pair(tap: Tap):
    for visit, of in ((VISIT, OTHER), (OTHER, THIRD), (THIRD, VISIT)):
        fill_with(tap, visit, tap.codes[of])

    assert findings(tap) == []


def test_a_bottle_of_elsewhere_is_a_deviation_whatever_the_sampler_says_of_it(tap: Tap):
    tap.begin(VISIT, hours=5)
    drawn = [drawing.Drawn(1, code=tap.codes[OTHER])]
    tap.press(drawing.already_done, VISIT, drawn=drawn, deviation="stand-short")

    assert set(deviations(tap, VISIT)) == {"stand-short", "wrong-bottle"}


def test_a_swap_is_gone_when_one_filling_is_taken_back(tap: Tap):
    swap(tap)
    with tap.pages() as pages:
        filled = [e for e in pages.recorded(OTHER) if e.fact.kind == "bottle.filled"]
    tap.record(EntryWithdrawn(of=filled[0].hash, reason="it was the other one"))

    assert "bottles-swapped" not in [one["kind"] for one in findings(tap)]


def test_a_swap_is_found_in_whatever_order_its_entries_arrive(tap: Tap):
    swap(tap)
    fill_with(tap, THIRD, tap.spare(), hours=5)
    with tap.store.reader() as db:
        entries = list(tap.store._all_entries(db))
    wanted = nodes.page_tables(tap.store)
    assert {row[1] for row in wanted["p_finding"]} >= {"bottles-swapped", "stand-too-short"}

    for seed in range(12):
        shuffled = list(entries)
        random.Random(seed).shuffle(shuffled)
        plans._protocols.clear()
        db = sqlite3.connect(":memory:", isolation_level=None)
        make_tables(db)
        for entry in shuffled:
            projections.follow(db, [entry])
        assert nodes.tables_in(db) == wanted
        db.close()


# too short


def short(tap: Tap, *, exact: str = "at", hours: float = 5.2) -> None:
    """Draw the visit's litre so many hours after its last use, though it was barred."""
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    used = tap.clock.at - timedelta(hours=hours)
    tap.press(last_use.state_last_use, VISIT, exact=exact, at=used, where="bath")
    while (due := tap.standing(VISIT).due).kind == "ask" and due.question != "stand-doubt":
        tap.press(kitchen.answer, VISIT, question=due.question, answer=due.answers[0])
    drawn = [drawing.Drawn(1, code=tap.codes[VISIT])]
    tap.press(drawing.already_done, VISIT, drawn=drawn, deviation="stand-short")


def test_a_stand_that_was_surely_too_short_is_one_finding_of_its_visit(tap: Tap):
    short(tap)

    (found,) = findings(tap)
    assert (found["kind"], found["about"]) == ("stand-too-short", f"visit:{VISIT}")
    assert found["says"]["minimum_s"] == 6 * 3600
    assert 5.2 * 3600 <= found["says"]["stood_s"] < 5.3 * 3600
    with tap.pages() as pages:
        kinds = [pages.fact(name).fact.kind for name in found["evidence"]]
    assert sorted(kinds) == ["bottle.filled", "water.used"]


def test_a_stand_that_may_have_been_long_enough_is_no_finding(tap: Tap):
    short(tap, exact="about", hours=6.1)

    assert findings(tap) == []
    assert "stand-doubtful" in deviations(tap, VISIT)


def test_a_short_stand_that_is_only_said_is_no_finding(tap: Tap):
    tap.begin(VISIT)
    tap.finish(VISIT)
    tap.record(DeviationStated(visit=VISIT, step="stand", deviation="stand-short"))

    assert findings(tap) == []


def test_what_is_said_of_a_short_stand_later_does_not_open_its_finding_again(tap: Tap):
    short(tap)
    (found,) = findings(tap)
    tap.decide(
        lambda p, r: desk.settle_finding(p, r, finding=found["finding"], reason="kept, marked")
    )
    tap.record(DeviationStated(visit=VISIT, step="stand", deviation="stand-short", reason="late"))

    assert findings(tap) == []


def test_water_told_after_the_draw_makes_the_stand_too_short(tap: Tap):
    tap.begin(VISIT)
    tap.finish(VISIT)
    assert findings(tap) == []
    used = tap.clock.at - timedelta(hours=2)
    tap.press(last_use.state_last_use, VISIT, exact="at", at=used, where="toilet", again=True)

    (found,) = findings(tap)
    assert found["kind"] == "stand-too-short"
