"""A changed round beside the one that stands: what is new, what is gone, what stays (R20)."""

from typing import Any

import pytest

from fieldapp.domain.facts import RoundChanged, SiteDropped
from fieldapp.reading import Change, difference, to_append
from fieldapp.reading.difference import is_private
from tests.reading.bench import put, read, small

VISIT = "routes.0.visits.0"


def changed(*puts: tuple[str, Any], visited: str = "") -> tuple[Change, ...]:
    plan = small()
    for path, value in puts:
        put(plan, path, value)
    return difference(read(small()).facts, read(plan).facts, visited=frozenset(visited.split()))


def kinds(changes: tuple[Change, ...]) -> list[tuple[str, str]]:
    return [(change.kind, change.about) for change in changes]


def without_visit(number: int) -> dict[str, Any]:
    plan = small()
    del plan["routes"][0]["visits"][number]
    return plan


def test_the_same_file_again_changes_nothing():
    assert changed() == ()
    assert to_append(()) == ()


def test_the_round_says_which_of_its_fields_changed():
    (change,) = changed(("round.to", "2027-05-30"), ("round.due", "PT24H"))
    assert (change.kind, change.about) == ("round-changed", "round:thornmere-1")
    assert change.fields == ("to", "due")
    assert isinstance(change.after, RoundChanged)
    assert change.after.to == "2027-05-30"


def test_a_second_difference_is_reckoned_from_the_round_as_it_was_changed():
    plan = small()
    put(plan, "round.due", "PT24H")
    first = difference(read(small()).facts, read(plan).facts)
    standing = (*read(small()).facts, *to_append(first))
    assert difference(standing, read(plan).facts) == ()
    assert kinds(difference(standing, read(small()).facts)) == [
        ("round-changed", "round:thornmere-1")
    ]


@pytest.mark.parametrize(
    ("path", "value", "found"),
    [
        ("people.1.name", "Bertil Evenspoon", [("person-changed", "person:clerk-1")]),
        (
            "people.1.id",
            "clerk-2",
            [
                ("person-added", "person:clerk-2"),
                ("person-dropped", "person:clerk-1"),
            ],
        ),
        ("sites.0.access", "Gate code 12", [("site-changed", "site:T-1")] * 2),
        ("routes.0.title", "Tuesday, hill side", [("route-changed", "route:R-1")]),
        (f"{VISIT}.draws.0.purpose", "investigation", [("visit-changed", "visit:V-1")]),
        (f"{VISIT}.id", "V-9", [("visit-added", "visit:V-9"), ("visit-dropped", "visit:V-1")]),
    ],
)
def test_each_change_is_named_by_what_it_is_about(path, value, found):
    assert kinds(changed((path, value))) == found


def test_private_fields_that_differ_are_known_as_private():
    change = changed(("sites.0.access", "Gate code 12"))[0]
    assert change.fields == ("access",)
    assert is_private(change, "access")
    assert not is_private(change, "tier")


def test_a_new_site_with_a_visit_comes_in_an_order_fit_to_append():
    plan = small()
    plan["sites"].append({**plan["sites"][1], "id": "T-3"})
    visit = {"id": "V-3", "site": "T-3", "protocol": "first-litre"}
    plan["routes"][0]["visits"].append({**visit, "draws": [{"draw": 1, "purpose": "request"}]})
    changes = difference(read(small()).facts, read(plan).facts)
    assert kinds(changes) == [
        ("site-added", "site:T-3"),
        ("site-added", "site:T-3"),
        ("visit-added", "visit:V-3"),
    ]
    assert [change.after for change in changes] == list(to_append(changes))


def test_a_site_that_left_the_file_is_dropped_with_its_visit():
    plan = without_visit(1)
    del plan["sites"][1]
    changes = difference(read(small()).facts, read(plan).facts)
    assert kinds(changes) == [
        ("round-changed", "round:thornmere-1"),
        ("site-dropped", "site:T-2"),
        ("visit-dropped", "visit:V-2"),
    ]
    assert to_append(changes)[1:] == (SiteDropped(site="T-2", round="thornmere-1"),)


def test_a_dropped_site_comes_back_as_added():
    plan = without_visit(1)
    del plan["sites"][1]
    dropped = to_append(difference(read(small()).facts, read(plan).facts))
    standing = (*read(small()).facts, *dropped)
    assert ("site-added", "site:T-2") in kinds(difference(standing, read(small()).facts))


def test_nothing_visited_is_removed():
    plan = without_visit(1)
    del plan["sites"][1]
    changes = difference(read(small()).facts, read(plan).facts, visited=frozenset({"V-2"}))
    assert ("visit-kept", "visit:V-2") in kinds(changes)
    assert ("site-kept", "site:T-2") in kinds(changes)
    assert not any(isinstance(fact, SiteDropped) for fact in to_append(changes))


def test_a_route_with_a_visited_stop_is_kept():
    plan = small()
    plan["routes"] = []
    old = read(small()).facts
    assert ("route-dropped", "route:R-1") in kinds(difference(old, read(plan).facts))
    kept = difference(old, read(plan).facts, visited=frozenset({"V-1"}))
    assert ("route-kept", "route:R-1") in kinds(kept)


def test_a_visited_stop_keeps_the_plan_it_was_drawn_by():
    purpose = (f"{VISIT}.draws.0.purpose", "investigation")
    changes = changed(purpose, visited="V-1")
    assert kinds(changes) == [("visit-kept", "visit:V-1")]
    assert to_append(changes) == ()


def test_another_order_of_the_stops_leaves_visited_ones_alone():
    plan = small()
    plan["routes"][0]["visits"].reverse()
    old = read(small()).facts
    moved = difference(old, read(plan).facts)
    assert sorted(kinds(moved)) == [("visit-changed", "visit:V-1"), ("visit-changed", "visit:V-2")]
    rest = difference(old, read(plan).facts, visited=frozenset({"V-1"}))
    assert kinds(rest) == [("visit-changed", "visit:V-2")]


def test_a_protocol_named_for_the_first_time_is_added():
    plan = without_visit(1)
    changes = difference(read(plan).facts, read(small()).facts)
    assert ("protocol-added", "protocol:first-litre") in kinds(changes)


def test_a_new_text_of_a_protocol_is_a_change():
    old = read(small())
    other = [
        type(kept)(protocol=kept.protocol, sha256="0" * 64, toml="other") for kept in old.protocols
    ]
    found = kinds(difference(other, old.protocols))
    assert found == [
        ("protocol-changed", "protocol:first-and-fifth"),
        ("protocol-changed", "protocol:first-litre"),
    ]
