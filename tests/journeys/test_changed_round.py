"""A round that changes after it was imported: seen first, appended on a word (R20)."""

import base64
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from fieldapp import work
from fieldapp.store import Store
from tests import nodes
from tests.journeys import walks

Plan = dict[str, Any]


# from the command line


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    """Give the folder of a node that imported the shipped round."""
    folder = tmp_path / "desk"
    done = walks.command("round", "import", str(nodes.SHIPPED), "--data", str(folder))
    assert done.exit_code == 0, done.stderr
    return folder


def test_the_same_file_again_changes_nothing(desk: Path) -> None:
    before = entries(desk)
    again = walks.command("round", "import", str(nodes.SHIPPED), "--data", str(desk))
    assert again.exit_code == 0
    assert "changes nothing" in again.stdout
    assert entries(desk) == before
    amended = walks.command("round", "import", str(nodes.SHIPPED), "--data", str(desk), "--amend")
    assert (amended.exit_code, entries(desk)) == (0, before)


def test_the_same_plan_written_otherwise_changes_nothing(desk: Path, tmp_path: Path) -> None:
    """Another order of keys, other blanks, a rehearsal that says something else."""
    plan = walks.shipped_plan()
    plan["rehearsal"]["begins"] = "05:00"
    file = tmp_path / "again.json"
    file.write_text(json.dumps(dict(reversed(plan.items())), indent=7), "utf-8")
    before = entries(desk)
    done = walks.command("round", "import", str(file), "--data", str(desk), "--json")
    answer = json.loads(done.stdout)
    assert (done.exit_code, answer["facts"], answer["changes"]) == (0, 0, [])
    assert entries(desk) == before


def test_a_changed_file_is_shown_and_nothing_is_recorded_before_amend(
    desk: Path, tmp_path: Path
) -> None:
    before = entries(desk)
    file = walks.written(tmp_path, without("V-0407"))
    done = walks.command("round", "import", str(file), "--data", str(desk))
    assert (done.exit_code, done.stdout) == (1, "")
    assert "visit-dropped visit:V-0407" in done.stderr.splitlines()
    assert "--amend" in done.stderr.splitlines()[-1]
    assert entries(desk) == before


def test_amend_appends_the_differences_and_then_the_file_changes_nothing(
    desk: Path, tmp_path: Path
) -> None:
    before = entries(desk)
    file = walks.written(tmp_path, without("V-0407"))
    done = walks.command("round", "import", str(file), "--data", str(desk), "--amend", "--json")
    answer = json.loads(done.stdout)
    assert done.exit_code == 0
    assert answer["changes"] == ["visit-dropped visit:V-0407"]
    assert entries(desk) == before + answer["facts"]
    again = walks.command("round", "import", str(file), "--data", str(desk), "--amend", "--json")
    assert json.loads(again.stdout)["facts"] == 0
    verified = walks.command("verify", "--data", str(desk), "--json")
    assert json.loads(verified.stdout)["chain"] == "intact"


def test_every_fault_of_a_file_is_said_at_once_with_file_place_value_and_cure(
    desk: Path, tmp_path: Path
) -> None:
    plan = walks.shipped_plan()
    plan["round"]["to"] = "2027-04-30"
    plan["sites"][2]["tier"] = "seven"
    plan["routes"][0]["visits"][1]["site"] = "Q-9999"
    plan["routes"][0]["visits"][3]["draws"][1]["purpose"] = "curiosity"
    before = entries(desk)
    file = walks.written(tmp_path, plan)
    done = walks.command("round", "import", str(file), "--data", str(desk), "--amend")
    assert (done.exit_code, done.stdout) == (1, "")
    lines = done.stderr.splitlines()
    assert all(line.startswith("day.json, ") and line.endswith(".") for line in lines)
    for place, value in (
        ("round.to", "2027-04-30"),
        ("sites[2].tier", "seven"),
        ("routes[0].visits[1].site", "Q-9999"),
        ("routes[0].visits[3].draws[1].purpose", "curiosity"),
    ):
        assert [line for line in lines if place in line and value in line], place
    assert entries(desk) == before


def test_a_file_with_one_fault_leaves_nothing_of_the_rest_behind(tmp_path: Path) -> None:
    plan = walks.shipped_plan()
    plan["sites"][6]["line"] = "gold"
    folder = tmp_path / "desk"
    file = walks.written(tmp_path, plan)
    done = walks.command("round", "import", str(file), "--data", str(folder))
    assert done.exit_code == 1
    with Store.open(folder) as store, store.pages() as pages:
        assert pages.rounds() == []
        assert pages.people() == []


# between central and a tablet that is out


def test_a_dropped_visit_leaves_the_route_and_its_codes_are_void(pair: nodes.Pair) -> None:
    codes = codes_of(pair.central, "V-0402")
    amend(pair, without("V-0402"))
    pair.exchange()
    for store in (pair.central, pair.tablet):
        with store.pages() as pages:
            assert "V-0402" not in [row["visit"] for row in pages.visits(route=nodes.ROUTE)]
            bottles = [pages.bottle(code) for code in codes]
        assert len(bottles) == 2
        assert [(b["voided"], b["issued"]) for b in bottles if b] == [("visit-dropped", 0)] * 2


def test_a_visit_that_was_opened_is_kept_with_its_site_and_bottles(pair: nodes.Pair) -> None:
    nodes.obey(pair, "V-0404")
    pair.exchange()
    plan = without("V-0404")
    plan["sites"] = [one for one in plan["sites"] if one["id"] != "Q-0422"]
    answer = amend(pair, plan)
    assert {"visit-kept visit:V-0404", "site-kept site:Q-0422"} <= set(answer["changes"])
    with pair.central.pages() as pages:
        visit, site = pages.visit("V-0404"), pages.site("Q-0422", nodes.ROUND)
        bottles = pages.bottles(visit="V-0404")
    assert visit is not None
    assert visit["state"] == "open"
    assert site is not None
    assert not site["dropped"]
    assert [bottle["voided"] for bottle in bottles] == ["", ""]


def test_the_purpose_of_a_bottle_does_not_change_once_its_visit_was_opened(
    pair: nodes.Pair,
) -> None:
    nodes.obey(pair, "V-0403")
    pair.exchange()
    answer = amend(pair, with_visit("V-0403", _for_investigation))
    assert answer["changes"] == ["visit-kept visit:V-0403 (draws)"]
    assert answer["facts"] == 0
    with pair.central.pages() as pages:
        plan = pages.plan("V-0403")
    assert plan is not None
    assert [draw["purpose"] for draw in plan.draws] == ["compliance"]


def test_a_filled_bottle_of_a_visit_dropped_meanwhile_becomes_a_finding(pair: nodes.Pair) -> None:
    """The coordinator dropped it while the tablet was out of reach; the water is in the bottle."""
    (code,) = codes_of(pair.central, "V-0401")
    nodes.walk(pair, "V-0401")
    amend(pair, without("V-0401"))
    pair.exchange()
    with pair.central.pages() as pages:
        found = pages.findings(pair.clock.at, round_id=nodes.ROUND)
        bottle = pages.bottle(code)
    assert bottle is not None
    assert bottle["filled"] == 1
    assert [(one["kind"], one["about"]) for one in found] == [("void-but-filled", f"bottle:{code}")]


def test_a_withdrawn_site_leaves_the_pool_and_the_tablet_hears_of_it(pair: nodes.Pair) -> None:
    plan = without("V-0406")
    plan["sites"] = [one for one in plan["sites"] if one["id"] != "Q-0433"]
    answer = amend(pair, plan)
    assert set(answer["changes"]) == {
        "site-dropped site:Q-0433",
        "visit-dropped visit:V-0406",
        "visit-changed visit:V-0407 (position)",
    }
    pair.exchange()
    for store in (pair.central, pair.tablet):
        with store.pages() as pages:
            site = pages.site("Q-0433", nodes.ROUND)
        assert site is not None, "what was planned once stays in the record"
        assert site["dropped"] == 1


def test_a_site_is_replaced_by_another_with_its_own_code_and_way_in(pair: nodes.Pair) -> None:
    old = codes_of(pair.central, "V-0406")
    amend(pair, with_another_site_for("V-0406"))
    nodes.issue(pair.central)
    pair.exchange()
    (new,) = [code for code in codes_of(pair.tablet, "V-0461")]
    assert new not in old
    with pair.tablet.pages() as pages:
        site = pages.site("Q-0461", nodes.ROUND, private=True)
        dropped = pages.site("Q-0433", nodes.ROUND)
        stops = [row["visit"] for row in pages.visits(route=nodes.ROUTE)]
    assert site is not None
    assert site["address"] == "12 Lanternmoss Court, Quillhaven"
    assert dropped is not None
    assert dropped["dropped"] == 1
    assert "V-0461" in stops
    assert "V-0406" not in stops


def test_a_tablet_enrolled_earlier_is_granted_a_new_route_in_the_act_that_plans_it(
    pair: nodes.Pair,
) -> None:
    answer = amend(pair, with_a_route("R-0507", nodes.SAMPLER))
    assert answer["facts"] == 4, "the route, its site, its visit, and the grant"
    with pair.central.reader() as db:
        acts = dict(
            db.execute(
                "SELECT kind, act FROM p_fact WHERE kind IN ('route.planned', 'device.granted')"
                " AND json_extract(data, '$.route') = 'R-0507'"
                " OR json_extract(data, '$.scope') = 'route:R-0507'"
            ).fetchall()
        )
    assert set(acts) == {"route.planned", "device.granted"}
    assert len(set(acts.values())) == 1
    with pair.tablet.pages() as pages:
        assert pages.route("R-0507") is None
    pair.exchange()
    with pair.tablet.pages() as pages:
        site = pages.site("Q-0409", nodes.ROUND, private=True)
        assert pages.visit("V-0501") is not None
    assert site is not None
    assert site["address"] == "3 Thimblewick Row, Quillhaven"


def test_a_route_of_another_sampler_does_not_reach_this_tablet(pair: nodes.Pair) -> None:
    plan = with_a_route("R-0507", "sampler-2")
    plan["people"].append({"id": "sampler-2", "roles": ["sampler"], "name": "Corvane Ashpettle"})
    amend(pair, plan)
    pair.exchange()
    with pair.tablet.pages() as pages:
        assert pages.route("R-0507") is None
        assert pages.visit("V-0501") is None
        assert pages.person("sampler-2") is not None, "persons go to all devices"


# what the tests stand on


def amend(pair: nodes.Pair, plan: Plan) -> dict[str, Any]:
    """Import a changed plan at central, with the word that appends it."""
    data = base64.b64encode(json.dumps(plan).encode()).decode()
    asked = {"file": "day.json", "data": data, "amend": True}
    return work.do(pair.central, "round-import", asked, work.quiet)


def without(visit: str) -> Plan:
    """Return the shipped plan without a visit."""
    plan = walks.shipped_plan()
    for route in plan["routes"]:
        route["visits"] = [one for one in route["visits"] if one["id"] != visit]
    del plan["rehearsal"]
    return plan


def with_visit(visit: str, change: Callable[[Plan], None]) -> Plan:
    """Return the shipped plan with one visit changed."""
    plan = walks.shipped_plan()
    change(next(one for route in plan["routes"] for one in route["visits"] if one["id"] == visit))
    return plan


def _for_investigation(visit: Plan) -> None:
    visit["draws"][0]["purpose"] = "investigation"


def with_another_site_for(visit: str) -> Plan:
    """Return the shipped plan with the site of a visit replaced, and the visit anew."""
    plan = without(visit)
    gone = next(one for one in plan["sites"] if one["id"] == "Q-0433")
    plan["sites"].remove(gone)
    plan["sites"].append({
        **gone, "id": "Q-0461", "name": "Ambrelle Fossick",
        "address": "12 Lanternmoss Court, Quillhaven",
    })  # fmt: skip
    plan["routes"][0]["visits"].append({
        "id": "V-0461", "site": "Q-0461", "protocol": "first-litre",
        "draws": [{"draw": 1, "purpose": "compliance"}],
    })  # fmt: skip
    return plan


def with_a_route(route: str, sampler: str) -> Plan:
    """Return the shipped plan with a second route of one visit."""
    plan = walks.shipped_plan()
    plan["routes"].append({
        "id": route, "title": "Friday", "day": "2027-05-07", "sampler": sampler,
        "visits": [{
            "id": "V-0501", "site": "Q-0409", "protocol": "first-litre",
            "draws": [{"draw": 1, "purpose": "compliance"}],
        }],
    })  # fmt: skip
    return plan


def codes_of(store: Store, visit: str) -> list[str]:
    """Return the codes printed for a visit."""
    with store.pages() as pages:
        return [str(b["bottle"]) for b in pages.bottles() if b["printed_for"] == visit]


def entries(folder: Path) -> int:
    """Return how many entries a closed folder holds."""
    done = walks.command("verify", "--data", str(folder), "--json")
    return int(json.loads(done.stdout)["entries"])
