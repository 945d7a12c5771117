"""What a sampler may do at a tap, on a real node: what is barred, what is never refused."""

from collections.abc import Callable, Iterator
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from fieldapp.commands import drawing, kitchen, last_use
from fieldapp.commands.asked import NotStarted, NotYet, StrangeAnswer, stated_at
from fieldapp.domain import codes
from fieldapp.domain.codes import BadCode
from fieldapp.domain.errors import NotDue, RuleBroken, StepOver, Unknown
from fieldapp.domain.timetext import format_utc
from fieldapp.store import ActDiffers
from tests.counter import MORNING
from tests.tap import BLANK, OTHER, PAIR, SAMPLER, VISIT, Tap


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    yield made
    made.store.close()


@pytest.fixture
def pair(tap: Tap) -> dict[int, str]:
    return tap.add(
        PAIR,
        "first-and-fifth",
        {"draw": 1, "purpose": "compliance"},
        {"draw": 5, "purpose": "compliance"},
    )


def refused(tap: Tap, broken: type[RuleBroken], press: Callable[[], Any]) -> RuleBroken:
    """Press, expect that rule, and that nothing at all was recorded."""
    before = tap.store.waiting()
    with pytest.raises(broken) as caught:
        press()
    assert tap.store.waiting() == before
    return caught.value


# an ordinary visit


def test_an_ordinary_first_litre_visit_walks_to_its_end(tap: Tap):
    tap.begin(VISIT)

    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT].lower())
    tap.press(drawing.fill, VISIT, fills={})
    tap.press(kitchen.sign, VISIT, name="  Imaginary Sampler ", close=True)

    assert tap.standing(VISIT).due.kind == "over"
    assert tap.standing(VISIT).deviations == ()
    assert tap.kinds(VISIT)[-4:] == [
        "bottle.set",
        "bottle.filled",
        "visit.signed",
        "visit.closed",
    ]
    assert tap.facts(VISIT, "visit.closed")[0].outcome == "done"
    assert tap.bottle(VISIT)["filled"] == 1


def test_a_second_tab_finds_the_step_over_and_adds_nothing(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    refused(tap, StepOver, lambda: tap.press(kitchen.open_visit, VISIT))

    tap.press(kitchen.agree, VISIT, how="spoken")
    refused(tap, StepOver, lambda: tap.press(kitchen.agree, VISIT, how="spoken"))

    used = tap.clock.at - timedelta(hours=8)
    tap.press(last_use.state_last_use, VISIT, exact="at", at=used)
    refused(tap, StepOver, lambda: tap.press(last_use.state_last_use, VISIT, exact="at", at=used))
    assert tap.kinds(VISIT) == ["visit.opened", "occupant.agreed", "water.used"]


def test_every_step_pressed_twice_is_recorded_once(tap: Tap):
    tap.begin(VISIT)
    steps = [
        (drawing.set_bottle, {"code": tap.codes[VISIT]}),
        (drawing.fill, {"fills": {}}),
        (kitchen.sign, {"name": "Imaginary Sampler"}),
        (kitchen.close, {}),
    ]
    for command, given in steps:
        tap.press(command, VISIT, **given)
        refused(tap, StepOver, lambda c=command, g=given: tap.press(c, VISIT, **g))


def test_an_act_whose_turn_has_not_come_says_what_is_due(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    told = refused(tap, NotDue, lambda: tap.press(kitchen.sign, VISIT, name="Imaginary"))
    assert told.values["due"] == "ask"
    refused(tap, NotDue, lambda: tap.press(drawing.fill, VISIT, fills={}))
    refused(tap, NotDue, lambda: tap.press(kitchen.close, VISIT))


def test_an_answer_that_the_document_does_not_offer_is_refused(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    used = tap.clock.at - timedelta(hours=8)
    tap.press(last_use.state_last_use, VISIT, exact="at", at=used)
    asked = tap.standing(VISIT).due.question
    refused(
        tap,
        StrangeAnswer,
        lambda: tap.press(kitchen.answer, VISIT, question=asked, answer="perhaps"),
    )


def test_a_no_to_the_draw_ends_the_visit_without_a_bottle(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="refused")
    assert tap.standing(VISIT).due.kind == "close"

    tap.press(kitchen.close, VISIT)

    assert tap.facts(VISIT, "visit.closed")[0].outcome == "refused"


def test_an_unknown_visit_is_said_to_be_unknown(tap: Tap):
    refused(tap, Unknown, lambda: tap.press(kitchen.open_visit, "nowhere"))


def test_a_signature_needs_a_name(tap: Tap):
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    refused(tap, kitchen.NameMissing, lambda: tap.press(kitchen.sign, VISIT, name="  "))


# the last use


def test_about_gives_and_takes_a_quarter_of_an_hour_and_the_shortest_counts(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    said = tap.clock.at - timedelta(hours=7)
    tap.press(last_use.state_last_use, VISIT, exact="about", at=said, where="toilet")

    used = tap.facts(VISIT, "water.used")[0]

    assert (used.from_, used.to) == (
        format_utc(said - timedelta(minutes=15)),
        format_utc(said + timedelta(minutes=15)),
    )
    assert tap.standing(VISIT).earliest_draw == said + timedelta(hours=6, minutes=15)


def test_about_now_never_lies_ahead_of_now(tap: Tap):
    reading = tap.clock.read()
    assert last_use.bounds("about", reading.at, None, reading) == (
        reading.at - timedelta(minutes=15),
        reading.at,
    )


@pytest.mark.parametrize(
    ("exact", "at", "to", "broken"),
    [
        ("at", None, None, last_use.NothingSaid),
        ("between", timedelta(hours=9), None, last_use.NothingSaid),
        ("between", timedelta(hours=7), timedelta(hours=9), last_use.CrossedTimes),
        ("at", timedelta(hours=-1), None, NotYet),
        ("between", timedelta(hours=2), timedelta(hours=-1), NotYet),
        ("roughly", timedelta(hours=7), None, StrangeAnswer),
    ],
)
def test_a_last_use_that_says_nothing_sensible_is_refused(
    tap: Tap, exact: str, at: timedelta | None, to: timedelta | None, broken: type[RuleBroken]
):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    now = tap.clock.at
    given = {"at": now - at if at else None, "to": now - to if to else None}
    refused(tap, broken, lambda: tap.press(last_use.state_last_use, VISIT, exact=exact, **given))


def test_nobody_knows_is_an_answer(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    tap.press(last_use.state_last_use, VISIT, exact="unknown")
    used = tap.facts(VISIT, "water.used")[0]
    assert (used.from_, used.to, used.exact) == ("", "", "unknown")


def test_water_that_ran_again_begins_the_stand_anew(tap: Tap):
    tap.begin(VISIT)
    assert tap.standing(VISIT).due.kind == "set"

    again = tap.clock.at - timedelta(minutes=20)
    tap.press(last_use.state_last_use, VISIT, exact="at", at=again, where="toilet", again=True)

    assert tap.standing(VISIT).due.kind == "wait"


def test_a_toilet_flushed_at_five_is_recorded_though_the_bottle_is_full(tap: Tap):
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    tap.press(kitchen.sign, VISIT, name="Imaginary Sampler", close=True)

    flushed = tap.clock.at - timedelta(hours=1)
    tap.press(last_use.state_last_use, VISIT, exact="at", at=flushed, where="toilet", again=True)

    found = {one.kind: one.bias for one in tap.standing(VISIT).deviations}
    assert found == {"tap-used-in-stand": "low"}


def test_water_cannot_have_run_again_before_the_visit_began(tap: Tap):
    used = tap.clock.at - timedelta(hours=1)
    refused(
        tap,
        NotStarted,
        lambda: tap.press(last_use.state_last_use, VISIT, exact="at", at=used, again=True),
    )


# too early: wait, leave, already done


def test_a_draw_too_early_is_barred_until_the_shortest_stand_is_enough(tap: Tap):
    tap.begin(VISIT, hours=5)
    code = tap.codes[VISIT]
    refused(tap, NotDue, lambda: tap.press(drawing.set_bottle, VISIT, code=code))

    tap.clock.pass_by(hours=1)

    tap.press(drawing.set_bottle, VISIT, code=code)
    assert tap.standing(VISIT).due.kind == "fill"


def test_what_was_done_too_early_is_recorded_with_its_direction(tap: Tap):
    tap.begin(VISIT, hours=5)
    done = drawing.Drawn(1, code=tap.codes[VISIT])
    tap.press(
        drawing.already_done, VISIT, drawn=[done], deviation="stand-short", reason="poured before"
    )

    told = tap.standing(VISIT)

    assert told.due.kind == "sign"
    found = {one.kind: one.bias for one in told.deviations}
    assert found == {"stand-short": "low", "wrong-order": "either"}  # nobody scanned it before
    assert tap.bottle(VISIT)["filled"] == 1


def test_what_is_already_done_needs_no_order_no_scan_and_no_answers(tap: Tap, pair: dict[int, str]):
    tap.press(kitchen.open_visit, PAIR)
    drawn = [drawing.Drawn(5, code=pair[5]), drawing.Drawn(1, code=pair[1], fill="below")]
    tap.press(drawing.already_done, PAIR, drawn=drawn, deviation="wrong-order")

    filled = {one.draw: one.fill for one in tap.facts(PAIR, "bottle.filled")}

    assert filled == {5: "line", 1: "below"}
    assert "wrong-order" in {one.kind for one in tap.standing(PAIR).deviations}


def test_already_done_still_asks_what_and_which(tap: Tap):
    press = lambda **given: tap.press(drawing.already_done, VISIT, **given)  # noqa: E731
    done = [drawing.Drawn(1, code=tap.codes[VISIT])]
    refused(tap, NotStarted, lambda: press(drawn=done, deviation="other"))
    tap.press(kitchen.open_visit, VISIT)
    refused(tap, drawing.NothingDone, lambda: press(drawn=[], deviation="other"))
    refused(tap, kitchen.StrangeDeviation, lambda: press(drawn=done, deviation="moonlight"))
    refused(
        tap,
        drawing.NoSuchDraw,
        lambda: press(drawn=[drawing.Drawn(7, code=tap.codes[VISIT])], deviation="other"),
    )
    refused(
        tap,
        BadCode,
        lambda: press(drawn=[drawing.Drawn(1, code="2HB4X90TC7A")], deviation="other"),
    )


def test_a_waiting_visit_is_left_and_taken_up_again(tap: Tap):
    tap.begin(VISIT, hours=5)
    tap.press(kitchen.leave_visit, VISIT, why="waiting")
    assert tap.standing(VISIT).state == "left"
    refused(tap, StepOver, lambda: tap.press(kitchen.leave_visit, VISIT, why="waiting"))

    tap.begin(OTHER)
    tap.clock.pass_by(hours=1)
    tap.press(kitchen.resume_visit, VISIT)

    assert tap.standing(VISIT).due.kind == "set"


def test_leaving_takes_one_press_and_the_reason_may_follow(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.leave_visit, VISIT, why="child-alone")
    assert tap.facts(VISIT, "visit.left")[0].reason == ""

    tap.press(kitchen.leave_visit, VISIT, why="child-alone", reason="about ten years old")

    assert tap.kinds(VISIT) == ["visit.opened", "visit.left", "visit.left"]


def test_a_visit_ends_without_its_bottles_only_with_how(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    refused(tap, NotDue, lambda: tap.press(kitchen.close, VISIT, outcome="done"))
    tap.press(kitchen.close, VISIT, outcome="nobody-home")
    assert tap.facts(VISIT, "visit.closed")[0].outcome == "nobody-home"


def test_a_visit_is_not_ended_while_the_tap_runs(tap: Tap, pair: dict[int, str]):
    tap.begin(PAIR)
    for code in pair.values():
        tap.press(drawing.set_bottle, PAIR, code=code)
    tap.press(drawing.open_tap, PAIR)
    refused(
        tap, kitchen.BottlesWaiting, lambda: tap.press(kitchen.close, PAIR, outcome="water-off")
    )


# bottles


def test_a_bottle_of_another_site_is_barred_with_what_it_belongs_to(tap: Tap):
    tap.begin(VISIT)
    told = refused(
        tap,
        drawing.WrongBottle,
        lambda: tap.press(drawing.set_bottle, VISIT, code=tap.codes[OTHER]),
    )
    assert (told.values["site"], told.values["draw"], told.values["wanted"]) == (OTHER, 1, 1)


def test_the_fifth_bottle_is_not_set_before_the_first(tap: Tap, pair: dict[int, str]):
    tap.begin(PAIR)
    told = refused(
        tap, drawing.WrongBottle, lambda: tap.press(drawing.set_bottle, PAIR, code=pair[5])
    )
    assert (told.values["draw"], told.values["wanted"]) == (5, 1)


def test_a_bottle_of_elsewhere_that_is_already_filled_here_is_recorded(tap: Tap):
    tap.begin(VISIT)
    swapped = [drawing.Drawn(1, code=tap.codes[OTHER])]
    tap.press(drawing.already_done, VISIT, drawn=swapped, deviation="wrong-bottle")
    with tap.pages() as pages:
        row = pages.bottle(tap.codes[OTHER])
    assert (row["visit"], row["printed_for"]) == (VISIT, OTHER)


def test_a_full_bottle_is_not_set_again(tap: Tap):
    tap.fill(OTHER)
    tap.begin(VISIT)
    told = refused(
        tap,
        drawing.AlreadyFilled,
        lambda: tap.press(drawing.set_bottle, VISIT, code=tap.codes[OTHER]),
    )
    assert told.values["site"] == OTHER


def test_a_spare_is_bound_by_the_scan(tap: Tap):
    spare = tap.spare()
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=spare)
    made = tap.facts(VISIT, "bottle.set")[0]
    assert (made.bottle, made.draw, made.purpose, made.held) == (spare, 1, "compliance", "known")


def test_a_spare_bound_at_one_tap_is_barred_at_the_next(tap: Tap):
    spare = tap.spare()
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=spare)
    tap.begin(OTHER)
    refused(tap, drawing.WrongBottle, lambda: tap.press(drawing.set_bottle, OTHER, code=spare))


def test_a_right_code_that_this_device_has_not_heard_of_is_taken_with_a_note(tap: Tap):
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=codes.new_code())
    assert tap.facts(VISIT, "bottle.set")[0].held == "unknown"


def test_a_broken_bottle_gives_way_to_a_spare(tap: Tap):
    spare, printed = tap.spare(), tap.codes[VISIT]
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=printed)
    tap.press(drawing.swap_bottle, VISIT, draw=1, code=spare, why="broken")

    assert tap.bottle(VISIT)["voided"] == "broken"
    assert tap.standing(VISIT).draws[0].bottle == spare
    tap.begin(OTHER)
    refused(tap, drawing.BottleVoid, lambda: tap.press(drawing.set_bottle, OTHER, code=printed))


def test_a_bottle_broken_before_its_scan_gives_way_too(tap: Tap):
    spare = tap.spare()
    tap.begin(VISIT)
    tap.press(drawing.swap_bottle, VISIT, draw=1, code=spare, why="lost")
    assert tap.bottle(VISIT)["voided"] == "lost"
    assert tap.standing(VISIT).due.kind == "fill"


def test_a_full_bottle_is_not_swapped_for_a_spare(tap: Tap):
    spare = tap.spare()
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={})
    refused(
        tap,
        drawing.AlreadyFilled,
        lambda: tap.press(drawing.swap_bottle, VISIT, draw=1, code=spare, why="broken"),
    )


# filling


def test_five_litres_in_one_run_are_two_presses(tap: Tap, pair: dict[int, str]):
    tap.begin(PAIR)
    for code in pair.values():
        tap.press(drawing.set_bottle, PAIR, code=code)
    before = len(tap.kinds(PAIR))
    tap.press(drawing.open_tap, PAIR)
    tap.press(drawing.fill, PAIR, fills={})

    assert tap.kinds(PAIR)[before:] == [
        "tap.opened",
        "tap.closed",
        "bottle.filled",
        "draw.poured",
        "draw.poured",
        "draw.poured",
        "bottle.filled",
    ]
    assert tap.standing(PAIR).due.kind == "sign"


def test_each_litre_of_a_run_may_be_filled_differently(tap: Tap, pair: dict[int, str]):
    tap.begin(PAIR)
    for code in pair.values():
        tap.press(drawing.set_bottle, PAIR, code=code)
    tap.press(drawing.open_tap, PAIR)
    fills = {3: drawing.Drawn(3, fill="spilled"), 5: drawing.Drawn(5, fill="below", volume_ml=930)}
    tap.press(drawing.fill, PAIR, fills=fills)

    assert [one.fill for one in tap.facts(PAIR, "draw.poured")] == ["line", "spilled", "line"]
    kept = {one.draw: (one.fill, one.volume_ml) for one in tap.facts(PAIR, "bottle.filled")}
    assert kept == {1: ("line", 0), 5: ("below", 930)}


def test_a_fill_level_that_is_none_is_refused(tap: Tap):
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    brimming = {1: drawing.Drawn(1, fill="brimming")}
    refused(tap, StrangeAnswer, lambda: tap.press(drawing.fill, VISIT, fills=brimming))


def test_the_field_blank_is_a_step_with_the_lot_of_its_water(tap: Tap):
    issued = tap.add(
        BLANK,
        "first-litre",
        {"draw": 1, "purpose": "compliance"},
        {"draw": 2, "purpose": "blank", "kind": "blank"},
    )
    tap.begin(BLANK)
    tap.press(drawing.set_bottle, BLANK, code=issued[1])
    tap.press(drawing.fill, BLANK, fills={})
    tap.press(drawing.set_bottle, BLANK, code=issued[2])
    refused(tap, drawing.LotMissing, lambda: tap.press(drawing.blank, BLANK, water_lot=" "))
    tap.press(drawing.blank, BLANK, water_lot="LW-77")

    poured = tap.facts(BLANK, "bottle.filled")[-1]
    assert (poured.bottle, poured.water_lot) == (issued[2], "LW-77")
    assert tap.standing(BLANK).due.kind == "sign"


# when it was done


def test_a_time_given_afterwards_is_kept_as_stated(tap: Tap):
    tap.begin(VISIT)
    earlier = tap.clock.at - timedelta(minutes=12)
    tap.press(
        drawing.set_bottle,
        VISIT,
        code=tap.codes[VISIT],
        when=stated_at(earlier, told_by="resident"),
    )
    made = tap.facts(VISIT, "bottle.set")[0]
    assert (made.done_at, made.basis, made.told_by) == (format_utc(earlier), "stated", "resident")


def test_nothing_is_recorded_as_done_in_the_future(tap: Tap):
    ahead = stated_at(tap.clock.at + timedelta(minutes=5))
    refused(tap, NotYet, lambda: tap.press(kitchen.open_visit, VISIT, when=ahead))


# differences


def test_a_stated_difference_carries_draws_and_words_but_no_direction_of_its_own(tap: Tap):
    tap.begin(VISIT)
    tap.press(kitchen.state_deviation, VISIT, kind="pre-flush", draws=[1, 1], reason="she says so")
    made = tap.facts(VISIT, "deviation.stated")[0]
    assert (made.deviation, made.draws) == ("pre-flush", (1,))
    assert "she says so" not in str(made.data())
    found = [(one.kind, one.bias) for one in tap.standing(VISIT).deviations]
    assert ("pre-flush", "low") in found


def test_a_difference_that_nobody_knows_is_refused(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    refused(
        tap,
        kitchen.StrangeDeviation,
        lambda: tap.press(kitchen.state_deviation, VISIT, kind="moonlight"),
    )


# taking back


def take_back(tap: Tap, of: str, by: str = SAMPLER, visit: str = VISIT) -> Any:
    return tap.decide(lambda p, r: kitchen.take_back(p, r, visit, of=of, by=by), by=by)


def test_the_last_press_is_taken_back_with_all_its_entries(tap: Tap, pair: dict[int, str]):
    tap.begin(PAIR)
    for code in pair.values():
        tap.press(drawing.set_bottle, PAIR, code=code)
    tap.press(drawing.open_tap, PAIR)
    entries = tap.press(drawing.fill, PAIR, fills={})
    tap.clock.pass_by(hours=2)

    take_back(tap, entries[0], visit=PAIR)

    assert tap.standing(PAIR).due.kind == "fill"
    assert "bottle.filled" not in tap.kinds(PAIR)
    with tap.pages() as pages:
        gone = pages.recorded(PAIR, gone=True)
    assert sum(one.fact.kind == "bottle.filled" for one in gone) == 2


def test_a_swap_taken_back_leaves_no_bottle_void(tap: Tap):
    spare = tap.spare()
    tap.begin(VISIT)
    entries = tap.press(drawing.swap_bottle, VISIT, draw=1, code=spare, why="broken")
    take_back(tap, entries[-1])
    assert tap.bottle(VISIT)["voided"] == ""
    assert tap.standing(VISIT).due.kind == "set"


def test_a_press_stays_takeable_for_ten_seconds_though_another_followed(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    (entry,) = tap.press(kitchen.agree, VISIT, how="refused")
    tap.press(kitchen.close, VISIT)
    take_back(tap, entry)
    assert "occupant.agreed" not in tap.kinds(VISIT)


def test_a_press_that_another_followed_is_not_taken_back_later(tap: Tap):
    (entry,) = tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken")
    tap.clock.pass_by(seconds=11)
    refused(tap, kitchen.TakenBackLate, lambda: take_back(tap, entry))


def test_nobody_takes_back_what_another_pressed(tap: Tap):
    (entry,) = tap.press(kitchen.open_visit, VISIT)
    refused(tap, kitchen.NotYours, lambda: take_back(tap, entry, by="sampler-2"))


def test_a_press_is_taken_back_once(tap: Tap):
    (entry,) = tap.press(kitchen.open_visit, VISIT)
    take_back(tap, entry)
    refused(tap, StepOver, lambda: take_back(tap, entry))


def test_a_press_of_another_visit_is_not_taken_back_here(tap: Tap):
    (entry,) = tap.press(kitchen.open_visit, OTHER)
    refused(tap, Unknown, lambda: take_back(tap, entry))


def test_the_same_act_with_another_answer_is_told_apart(tap: Tap):
    act = "019f0000-0000-7000-8000-000000000001"
    decide = lambda p, r: kitchen.open_visit(p, r, VISIT)  # noqa: E731
    tap.store.act(act, {"fill": "line"}, decide, by=SAMPLER)
    assert tap.store.act(act, {"fill": "line"}, decide, by=SAMPLER).again
    with pytest.raises(ActDiffers):
        tap.store.act(act, {"fill": "below"}, decide, by=SAMPLER)
    assert tap.kinds(VISIT) == ["visit.opened"]


def test_private_words_stay_out_of_what_is_signed(tap: Tap):
    tap.press(kitchen.open_visit, VISIT)
    tap.press(kitchen.leave_visit, VISIT, why="other", reason="the Imaginary family is away")
    tap.press(kitchen.resume_visit, VISIT)
    tap.press(kitchen.agree, VISIT, how="spoken", name="Imaginary Resident")
    with tap.store.reader() as db:
        bodies = b"".join(bytes(row[0]) for row in db.execute("SELECT body FROM entry"))
    assert b"Imaginary family" not in bodies
    assert b"Imaginary Resident" not in bodies


def test_the_morning_of_these_tests_is_six_by_the_clocks_there():
    assert datetime.fromisoformat("2027-05-04T06:00-06:00") == MORNING
