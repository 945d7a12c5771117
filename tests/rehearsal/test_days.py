"""The demo's files moved to other days."""

import json
from datetime import date

import pytest

from fieldapp.places import shipped
from fieldapp.reading.rounds import read_round
from fieldapp.rehearsal.days import as_file, moved, on_day
from fieldapp.rehearsal.script import read_script
from tests.nodes import private_words

FILES = ("demo-town.json", "demo-town-before.json")


def plan(name: str) -> dict:
    return dict(json.loads((shipped("demo_routes") / name).read_text("utf-8")))


@pytest.mark.parametrize("name", FILES)
@pytest.mark.parametrize("day", ["2024-02-29", "2026-12-31", "2031-06-15"])
def test_a_town_on_any_day_is_a_round_without_a_fault_or_a_month_that_does_not_count(name, day):
    there = on_day(plan(name), date.fromisoformat(day))
    planned = read_round(as_file(there), name)
    read_script(as_file(there), name, planned)
    assert [route.day for route in planned.routes] == [day]
    assert planned.round.from_ < day < planned.round.to
    assert not [note for note in planned.notes if "month" in note.kind]


def test_all_days_move_alike_and_the_months_are_those_touched():
    there = moved(plan("demo-town.json"), 200)
    assert (there["round"]["from"], there["round"]["to"]) == ("2027-12-18", "2028-04-17")
    assert there["round"]["months"] == [1, 2, 3, 4, 12]
    assert there["routes"][0]["day"] == "2027-12-25"
    assert there["rehearsal"]["reports"][0]["analysed_at"] == "2027-12-28"


def test_moving_nowhere_changes_nothing():
    for name in FILES:
        assert moved(plan(name), 0) == plan(name)


def test_the_two_rounds_share_their_town_and_no_id_of_a_visit_or_route():
    today, before = (plan(name) for name in FILES)
    town = {one["id"]: one for one in before["sites"]}
    assert all(town[one["id"]] == one for one in today["sites"])
    for ids in (route_ids, visit_ids):
        assert not ids(today) & ids(before)


def route_ids(one: dict) -> set[str]:
    return {route["id"] for route in one["routes"]}


def visit_ids(one: dict) -> set[str]:
    return {visit["id"] for route in one["routes"] for visit in route["visits"]}


def test_no_private_word_of_the_town_stands_outside_its_private_keys():
    keys = ("name", "address", "phone", "contact", "access")
    for name in FILES:
        rest = plan(name)
        words = private_words(shipped("demo_routes") / name)
        for one in (*rest["people"], *rest["sites"]):
            for key in keys:
                one.pop(key, None)
        text = json.dumps(rest, ensure_ascii=False)
        assert len(words) > 15
        assert not [word for word in words if word in text]
