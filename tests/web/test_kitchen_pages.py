"""The Kitchen's pages without scripts: the present step, its ways out, and what they keep back."""

import re
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path
from urllib.parse import urlsplit

import pytest

from fieldapp.commands import drawing, kitchen
from fieldapp.domain.facts import SiteListed
from fieldapp.domain.timetext import chips
from fieldapp.identity import new_act
from tests.tap import OTHER, PAIR, SAMPLER, VISIT, Tap
from tests.web.reader import Reader, words

STREET, CODE, RESIDENT = "3 Imaginary Row", "Gate 4471", "Imaginary Resident"


def path(visit: str = VISIT, more: str = "") -> str:
    return f"/kitchen/visits/{visit}{more}"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "tablet")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    made.record(
        SiteListed(
            site=VISIT, round="spring", route="north", tap="kitchen", tier="1", line="copper",
            name=RESIDENT, address=STREET, access=CODE,
        )
    )  # fmt: skip
    yield made
    made.store.close()


@pytest.fixture
def sampler(tap: Tap) -> Reader:
    return Reader(tap, SAMPLER)


def at_last_use(sampler: Reader) -> str:
    """Bring the visit to the question of the last use; return the chip of eight hours ago."""
    sampler.send(path(), path(more="/open"))
    sampler.send(path(), path(more="/answer"), answer="agreed")
    page = sampler.read(path())
    return re.findall(r'name="at" value="([^"]+)"', page)[-1]


# the day


def test_the_day_shows_stops_by_code_and_keeps_addresses_back(tap: Tap, sampler: Reader):
    page = sampler.read("/kitchen/")
    assert VISIT in page
    assert f"Go to {VISIT}" in words(page)
    for private in (STREET, CODE, RESIDENT):
        assert private not in page


def test_the_site_at_hand_shows_its_address_until_the_visit_is_closed(tap: Tap, sampler: Reader):
    assert STREET in sampler.read(path())
    tap.begin(VISIT)
    assert CODE in sampler.read(path())
    tap.finish(VISIT)
    closed = sampler.read(path())
    for private in (STREET, CODE, RESIDENT):
        assert private not in closed


def test_a_waiting_stop_rings_at_its_earliest_draw_and_the_way_leads_next_door(
    tap: Tap, sampler: Reader
):
    tap.begin(VISIT, hours=5.5)
    tap.press(kitchen.leave_visit, VISIT, why="waiting")
    page = words(sampler.read("/kitchen/"))
    assert f"Next to ring: {VISIT}" in page
    assert f"Go to {OTHER}" in page


def test_leaving_to_wait_goes_on_to_the_next_stop(tap: Tap, sampler: Reader):
    tap.begin(VISIT, hours=5.5)
    answer = sampler.send(path(more="?wait=1"), path(more="/leave"))
    assert urlsplit(answer.location).path == path(OTHER)
    assert tap.standing(VISIT).state == "left"


def test_the_reason_for_leaving_may_follow_in_the_van(tap: Tap, sampler: Reader):
    tap.press(kitchen.open_visit, VISIT)
    sampler.land(path(more="/different"), path(more="/leave"), why="child-alone")
    sampler.land(path(), path(more="/leave"), reason="about ten years old")
    assert [one.why for one in tap.facts(VISIT, "visit.left")] == ["child-alone"] * 2
    assert tap.standing(VISIT).state == "left"


def test_nobody_chosen_is_asked_who_first(tap: Tap):
    stranger = Reader(tap, "")
    assert urlsplit(stranger.client.get("/kitchen/").location).path == "/"


def test_a_press_without_a_person_records_nothing(tap: Tap):
    stranger = Reader(tap, "")
    answer = stranger.send(path(), path(more="/open"))
    assert urlsplit(answer.location).path == "/"
    assert tap.kinds(VISIT) == []


# one entry a press


def test_the_same_form_sent_twice_gives_the_same_answer_and_one_entry(tap: Tap, sampler: Reader):
    fields = sampler.hidden(path(), path(more="/open"))
    answers = [sampler.client.post(path(more="/open"), data=fields) for _ in range(3)]
    assert {(one.status_code, one.location) for one in answers} == {(303, path())}
    assert tap.kinds(VISIT) == ["visit.opened"]


def test_the_same_act_with_another_answer_is_409_and_says_so(tap: Tap, sampler: Reader):
    sampler.send(path(), path(more="/open"))
    fields = sampler.hidden(path(), path(more="/answer"))
    for answer in ("agreed", "refused"):
        told = sampler.client.post(path(more="/answer"), data={**fields, "answer": answer})
    assert told.status_code == 409
    assert [one.how for one in tap.facts(VISIT, "occupant.agreed")] == ["spoken"]


def test_a_second_tab_lands_on_the_present_step_with_a_word(tap: Tap, sampler: Reader):
    old = sampler.hidden(path(), path(more="/open"))
    sampler.send(path(), path(more="/open"))

    answer = sampler.client.post(path(more="/open"), data=old | {"act": new_act()})

    assert answer.status_code == 303
    page = words(sampler.read(answer.location))
    assert "recorded already" in page
    assert "May water be drawn here today?" in page
    assert tap.kinds(VISIT) == ["visit.opened"]


# the last use


def test_a_last_use_is_read_back_before_it_is_recorded(tap: Tap, sampler: Reader):
    chip = at_last_use(sampler)
    given = {"at": chip, "exact": "at", "where": "bath"}

    answer = sampler.send(path(), path(more="/last-use"), **given)
    assert "water.used" not in tap.kinds(VISIT)
    back = answer.location
    page = words(sampler.read(back))
    assert "at the shortest" in page
    assert "bath" in page

    sampler.land(back, path(more="/last-use"))
    used = tap.facts(VISIT, "water.used")[0]
    assert (used.exact, used.where, used.told_by) == ("at", "bath", "resident")


def test_nobody_knows_needs_no_reading_back(tap: Tap, sampler: Reader):
    at_last_use(sampler)
    sampler.land(path(), path(more="/last-use"), exact="unknown")
    assert tap.facts(VISIT, "water.used")[0].exact == "unknown"


def test_a_local_time_that_no_clock_showed_is_refused_with_what_to_do(tap: Tap, sampler: Reader):
    at_last_use(sampler)
    answer = sampler.send(
        path(), path(more="/last-use"), exact="at", at_local="2027-03-14T02:30", said="yes"
    )
    assert answer.status_code == 422
    assert "went forward" in words(answer.get_data(as_text=True))
    assert "water.used" not in tap.kinds(VISIT)


def test_a_local_time_that_came_twice_is_asked_for_the_first_or_the_second(
    tap: Tap, sampler: Reader
):
    at_last_use(sampler)
    given = {"exact": "at", "at_local": "2026-11-01T01:30", "said": "yes"}
    answer = sampler.send(path(), path(more="/last-use"), **given)
    assert answer.status_code == 422
    assert "twice" in words(answer.get_data(as_text=True))

    sampler.land(path(), path(more="/last-use"), **given, fold="1")
    assert tap.facts(VISIT, "water.used")[0].from_ == "2026-11-01T08:30:00.000Z"


def test_the_chips_are_half_hours_of_the_clocks_there(tap: Tap, sampler: Reader):
    at_last_use(sampler)
    shown = set(re.findall(r'name="at" value="([^"]+)"', sampler.read(path())))
    offered = {one.at.isoformat() for one in chips(tap.clock.at, "America/Boise")}
    assert shown == offered


# bars and their three ways


def test_beside_too_early_stand_wait_leave_and_already_done(tap: Tap, sampler: Reader):
    tap.begin(VISIT, hours=5)
    page = sampler.read(path())
    said = words(page)
    assert "Too early" in said
    assert "Wait, ring at" in said
    assert "Leave, come back later" in said
    assert "It is already done" in said
    until = re.search(r'data-main data-until="([^"]+)"', page)
    assert until
    assert until[1] == tap.standing(VISIT).earliest_draw.isoformat()


def test_a_wrong_bottle_says_where_it_belongs_and_offers_three_ways(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    answer = sampler.send(path(), path(more="/set"), code=tap.codes[OTHER])
    said = words(answer.get_data(as_text=True))
    assert answer.status_code == 422
    assert f"at {OTHER}" in said
    for way in ("Take another bottle", "Leave, come back later", "It is already done"):
        assert way in said
    assert "bottle.set" not in tap.kinds(VISIT)


@pytest.mark.parametrize(
    ("code", "sentence"),
    [
        ("2HB4X90TC7", "has 11 characters; this has 10"),
        ("2HB4X90TC7#", "#, at place 11"),
        ("2HB4X90TC7A", "One character is wrong"),
    ],
)
def test_a_code_misread_is_told_apart_and_stays_in_the_field(
    tap: Tap, sampler: Reader, code: str, sentence: str
):
    tap.begin(VISIT)
    answer = sampler.send(path(), path(more="/set"), code=code)
    page = answer.get_data(as_text=True)
    assert answer.status_code == 422
    assert sentence in words(page)
    assert f'value="{code}"' in page


def test_already_done_is_recorded_from_its_page(tap: Tap, sampler: Reader):
    tap.begin(VISIT, hours=5)
    sampler.land(
        path(more="/done"), path(more="/done"), was_1="yes", code_1=tap.codes[VISIT],
        deviation="stand-short", reason="full when I came",
    )  # fmt: skip
    assert tap.kinds(VISIT)[-2:] == ["deviation.stated", "bottle.filled"]


def test_already_done_without_a_draw_keeps_what_was_typed(tap: Tap, sampler: Reader):
    tap.begin(VISIT, hours=5)
    answer = sampler.send(
        path(more="/done"), path(more="/done"), deviation="stand-short", reason="as told"
    )
    assert answer.status_code == 422
    assert "as told" in answer.get_data(as_text=True)


def test_a_step_done_earlier_is_recorded_with_its_time(tap: Tap, sampler: Reader):
    sampler.land(path(), path(more="/open"), done_local="2027-05-04T05:40")
    opened = tap.facts(VISIT, "visit.opened")[0]
    assert (opened.done_at, opened.basis) == ("2027-05-04T11:40:00.000Z", "stated")


# filling, differing, taking back


def test_five_litres_show_what_is_poured_and_ask_two_presses(tap: Tap, sampler: Reader):
    codes = tap.add(
        PAIR,
        "first-and-fifth",
        {"draw": 1, "purpose": "compliance"},
        {"draw": 5, "purpose": "compliance"},
    )
    tap.begin(PAIR)
    for draw in (1, 5):
        sampler.land(path(PAIR), path(PAIR, "/set"), code=codes[draw].lower())
    assert "poured away: 2, 3, 4" in words(sampler.read(path(PAIR)))
    sampler.land(path(PAIR), path(PAIR, "/tap"))
    page = sampler.land(path(PAIR), path(PAIR, "/fill"), fill_3="spilled")
    assert "2 bottles into the crate" in words(page)
    assert [one.fill for one in tap.facts(PAIR, "draw.poured")] == ["line", "spilled", "line"]


def test_a_difference_is_noted_in_their_words_and_shown_with_its_direction(
    tap: Tap, sampler: Reader
):
    tap.begin(VISIT)
    more = path(more="/different")
    sampler.land(more, more, deviation="pre-flush", draws="1", reason="she ran it")
    tap.finish(VISIT)
    page = words(sampler.read(path()))
    assert "What was different" in page
    assert "low" in page


def test_what_nobody_chose_is_asked_for_in_a_sentence(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    more = path(more="/different")
    answer = sampler.send(more, more, reason="something")
    assert answer.status_code == 422
    assert "Choose what was different" in words(answer.get_data(as_text=True))
    assert "deviation.stated" not in tap.kinds(VISIT)


def test_another_bottle_takes_the_place_of_a_broken_one(tap: Tap, sampler: Reader):
    spare = tap.spare()
    tap.begin(VISIT)
    sampler.land(path(more="/different"), path(more="/swap"), draw="1", why="broken", code=spare)
    assert tap.bottle(VISIT)["voided"] == "broken"


def test_the_last_press_is_taken_back_from_its_bar(tap: Tap, sampler: Reader):
    sampler.land(path(), path(more="/open"))
    page = sampler.read(path())
    assert "Visit begun 06:" in words(page)
    sampler.land(path(), path(more="/take-back"))
    assert tap.kinds(VISIT) == []


def test_another_person_is_not_offered_what_somebody_pressed(tap: Tap, sampler: Reader):
    tap.press(kitchen.open_visit, VISIT)
    assert "Take back" in sampler.read(path())
    assert "Take back" not in Reader(tap, "clerk-1").read(path())


def test_the_basis_of_the_stand_is_printed_with_the_stand(tap: Tap, sampler: Reader):
    tap.begin(VISIT, hours=8)
    assert "8 h 00, stated by the resident" in words(sampler.read(path()))
    tap.finish(VISIT)
    assert "stated by the resident" in words(sampler.read(path()))


def test_water_that_ran_again_is_asked_for_at_any_step(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    more = path(more="/last-use")
    chip = re.findall(r'name="at" value="([^"]+)"', sampler.read(more))[0]
    answer = sampler.send(more, more, at=chip, exact="at", where="toilet")
    sampler.land(answer.location, more)
    assert tap.standing(VISIT).due.kind == "wait"


def test_a_closed_visit_lists_what_was_taken(tap: Tap, sampler: Reader):
    tap.begin(VISIT)
    tap.press(drawing.set_bottle, VISIT, code=tap.codes[VISIT])
    tap.press(drawing.fill, VISIT, fills={1: drawing.Drawn(1, fill="below")})
    tap.press(kitchen.sign, VISIT, name="Imaginary Sampler", close=True)
    page = words(sampler.read(path()))
    code = tap.codes[VISIT]
    assert f"{code[:4]}-{code[4:8]}-{code[8:]}" in page
    assert "below the line" in page


def test_the_clock_answers_this_nodes_time(tap: Tap, sampler: Reader):
    before = tap.clock.at
    said = sampler.read("/kitchen/clock")
    assert said.startswith(f"{before + timedelta(seconds=1):%Y-%m-%dT%H:%M}")
