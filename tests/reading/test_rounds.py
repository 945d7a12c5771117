"""Round files: what is read, what is refused and where, all at once."""

import json
import zoneinfo
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain import protocols
from fieldapp.domain.facts import RoundOpened, SiteListed
from fieldapp.reading import BadFile, read_round
from fieldapp.reading.header import _zones
from tests.reading.bench import GONE, assert_whole, clean_day, faults_of, put, read, small

LONG = "a" * 41
VISIT = "routes.0.visits.0"
PAIR = f"{VISIT}.draws"
BLANK = "routes.0.visits.1.draws.1"

# path to change, what to put there, kind of the fault, path of the fault
WRONG: list[tuple[str, Any, str, str]] = [
    ("round", GONE, "missing", "round"),
    ("round", [], "form", "round"),
    ("round.id", GONE, "missing", "round.id"),
    ("round.id", None, "missing", "round.id"),
    ("round.id", "two words", "bad-id", "round.id"),
    ("round.id", LONG, "bad-id", "round.id"),
    ("round.id", "..", "bad-id", "round.id"),
    ("round.id", "Ω-1", "bad-id", "round.id"),
    ("round.title", "  ", "blank", "round.title"),
    ("round.title", 7, "form", "round.title"),
    ("round.title", "x" * 121, "too-long", "round.title"),
    ("round.title", "a\u0007b", "control", "round.title"),
    ("round.title", "a\ud800b", "control", "round.title"),
    ("round.rule", "us-1850", "no-rule", "round.rule"),
    ("round.convention", "about", "no-convention", "round.convention"),
    ("round.zone", "Boise", "no-zone", "round.zone"),
    ("round.zone", "../../etc/passwd", "no-zone", "round.zone"),
    ("round.zone", "localtime", "no-zone", "round.zone"),
    ("round.zone", "America", "no-zone", "round.zone"),
    ("round.from", "2027-02-30", "no-date", "round.from"),
    ("round.from", "1 May 2027", "form", "round.from"),
    ("round.from", "20270501", "form", "round.from"),
    ("round.from", "2027-W18-2", "form", "round.from"),
    ("round.to", "2027-04-30", "reversed", "round.to"),
    ("round.months", [], "blank", "round.months"),
    ("round.months", [13], "range", "round.months[0]"),
    ("round.months", [5, 0], "range", "round.months[1]"),
    ("round.months", [True], "range", "round.months[0]"),
    ("round.months", [5, 5], "word-twice", "round.months[1]"),
    ("round.months", 5, "form", "round.months"),
    ("round.months", [6], "no-month-counts", "round.months"),
    ("round.laboratory", "lab-1", "form", "round.laboratory"),
    ("round.laboratory.title", GONE, "missing", "round.laboratory.title"),
    ("round.due", "two days", "bad-duration", "round.due"),
    ("round.due", "P1M", "bad-duration", "round.due"),
    ("round.due", "PT0H", "bad-duration", "round.due"),
    ("round.keep_poured", "no", "form", "round.keep_poured"),
    ("people", GONE, "missing", "people"),
    ("people.0.roles", ["driver"], "word", "people[0].roles[0]"),
    ("people.0.roles", [], "blank", "people[0].roles"),
    ("people.0.roles", ["clerk"], "not-a-sampler", "routes[0].sampler"),
    ("people.0.name", 12, "private-form", "people[0].name"),
    ("people.1.id", "sampler-1", "id-twice", "people[1].id"),
    ("people.1.id", "Sampler-1", "id-twice", "people[1].id"),
    ("sites.0", "T-1", "form", "sites[0]"),
    ("sites.0.tap", GONE, "missing", "sites[0].tap"),
    ("sites.0.tier", "first", "word", "sites[0].tier"),
    ("sites.0.tier", 1, "word", "sites[0].tier"),
    ("sites.0.line", "led", "word", "sites[0].line"),
    ("sites.0.plumbing", "", "word", "sites[0].plumbing"),
    ("sites.0.address", "x" * 501, "too-long", "sites[0].address"),
    ("sites.1.id", "T-1", "id-twice", "sites[1].id"),
    ("routes", {}, "form", "routes"),
    ("routes.0.day", "2027-06-01", "day-outside", "routes[0].day"),
    ("routes.0.day", "2027-04-31", "no-date", "routes[0].day"),
    ("routes.0.sampler", "sampler-9", "not-listed", "routes[0].sampler"),
    ("routes.0.sampler", "clerk-1", "not-a-sampler", "routes[0].sampler"),
    ("routes.0.visits", GONE, "missing", "routes[0].visits"),
    (f"{VISIT}.site", "T-9", "not-listed", "routes[0].visits[0].site"),
    (f"{VISIT}.protocol", "second-litre", "no-protocol", "routes[0].visits[0].protocol"),
    ("routes.0.visits.1.id", "V-1", "id-twice", "routes[0].visits[1].id"),
    (PAIR, [], "no-draw", "routes[0].visits[0].draws"),
    (PAIR, GONE, "missing", "routes[0].visits[0].draws"),
    (f"{PAIR}.0.draw", 0, "range", "routes[0].visits[0].draws[0].draw"),
    (f"{PAIR}.0.draw", "1", "range", "routes[0].visits[0].draws[0].draw"),
    (f"{PAIR}.0.draw", 7, "draw-unknown", "routes[0].visits[0].draws[0].draw"),
    (f"{PAIR}.0.draw", 3, "draw-poured", "routes[0].visits[0].draws[0].draw"),
    (f"{PAIR}.0.draw", 5, "draw-twice", "routes[0].visits[0].draws[1].draw"),
    (f"{PAIR}.1", GONE, "draw-left-out", "routes[0].visits[0].draws"),
    (f"{PAIR}.0.purpose", "curiosity", "word", "routes[0].visits[0].draws[0].purpose"),
    (f"{PAIR}.0.kind", "flushed", "kind-of-protocol", "routes[0].visits[0].draws[0].kind"),
    (f"{PAIR}.0.purpose", "blank", "kind-missing", "routes[0].visits[0].draws[0].kind"),
    (f"{BLANK}.kind", GONE, "kind-missing", "routes[0].visits[1].draws[1].kind"),
    (f"{BLANK}.kind", "duplicate", "kind-clash", "routes[0].visits[1].draws[1].purpose"),
    (f"{BLANK}.purpose", "compliance", "kind-clash", "routes[0].visits[1].draws[1].purpose"),
    (f"{BLANK}.draw", 1, "control-number", "routes[0].visits[1].draws[1].draw"),
    (
        f"{PAIR}.0",
        {"draw": 6, "kind": "duplicate", "purpose": "duplicate"},
        "draw-left-out",
        "routes[0].visits[0].draws",
    ),
]


@pytest.mark.parametrize(("path", "value", "kind", "where"), WRONG)
def test_what_is_wrong_is_named_where_it_stands(path, value, kind, where):
    plan = small()
    put(plan, path, value)
    assert (kind, where) in faults_of(json.dumps(plan).encode())


@pytest.mark.parametrize(("path", "value", "kind", "where"), WRONG)
def test_every_fault_says_in_one_line_where_it_stands_and_what_to_do(path, value, kind, where):
    plan = small()
    put(plan, path, value)
    with pytest.raises(BadFile) as bad:
        read(plan)
    for fault in bad.value.faults:
        assert fault.line.startswith(f"spring.json, {fault.path}")
        assert_whole(fault)


@pytest.mark.parametrize(
    ("data", "kind"),
    [
        (b"", "empty"),
        (b" \n ", "empty"),
        (b"PK\x03\x04\xff", "encoding"),
        ('{"round": "Größe"}'.encode("latin-1"), "encoding"),
        ("{}".encode("utf-16"), "encoding"),
        (b'{"round": ', "not-json"),
        (b"round: 1", "not-json"),
        (b'{"a": NaN}', "bad-number"),
        (b'{"a": ' + b"9" * 5000 + b"}", "bad-number"),
        (b"[" * 200_000, "too-deep"),
        (b"[]", "form"),
        (b"7", "form"),
        (b'{"round": 1, "round": 2}', "key-twice"),
        (b" " * 5_000_001, "too-large"),
    ],
)
def test_what_is_no_round_file_at_all_is_refused(data, kind):
    assert kind in {kind for kind, _ in faults_of(data)}


def test_a_broken_file_names_line_and_column():
    with pytest.raises(BadFile) as bad:
        read_round(b'{\n  "round": {,\n}', "spring.json")
    assert bad.value.faults[0].line.startswith("spring.json: Line 2, column 13 is not JSON")


def test_a_file_of_a_windows_editor_reads_the_same():
    data = json.dumps(small()).encode("utf-8-sig").replace(b", ", b",\r\n")
    assert read_round(data, "spring.json").facts == read(small()).facts


def test_all_faults_come_at_once():
    plan = small()
    for path, value, _, _ in (WRONG[5], WRONG[15], WRONG[13], WRONG[41], WRONG[54]):
        put(plan, path, value)
    put(plan, "sites.0.line", "led")
    found = faults_of(json.dumps(plan).encode())
    assert {path for _, path in found} >= {"round.id", "round.rule", "sites[0].line"}
    assert len(found) >= 5


def test_a_fault_does_not_drag_others_behind_it():
    plan = small()
    put(plan, "sites.0.line", "led")
    assert faults_of(json.dumps(plan).encode()) == {("word", "sites[0].line")}
    plan = small()
    put(plan, "people.0.roles", ["driver"])
    assert faults_of(json.dumps(plan).encode()) == {("word", "people[0].roles[0]")}


def test_a_fault_names_the_nearest_id():
    plan = small()
    put(plan, f"{VISIT}.draws.0.purpose", "curiosity")
    with pytest.raises(BadFile) as bad:
        read(plan)
    assert "spring.json, routes[0].visits[0].draws[0].purpose (V-1): curiosity" in (
        bad.value.faults[0].line
    )


@pytest.mark.parametrize("key", ["name", "address", "phone", "contact", "access"])
@pytest.mark.parametrize("text", ["Crumblebee" + "x" * 501, "Crumble\u0007bee", ["Crumblebee"]])
def test_a_fault_never_holds_private_text(key, text):
    plan = small()
    put(plan, f"sites.0.{key}", text)
    with pytest.raises(BadFile) as bad:
        read(plan)
    assert [fault.path for fault in bad.value.faults] == [f"sites[0].{key}"]
    assert "rumble" not in repr(bad.value.faults) + repr(bad.value)


def test_a_round_becomes_facts_that_refer_to_each_other():
    found = read(small())
    assert found.round.protocols == {
        name: protocols.find(name).sha256 for name in ("first-and-fifth", "first-litre")
    }
    assert {kept.protocol: kept.toml for kept in found.protocols} == {
        name: protocols.find(name).toml for name in ("first-and-fifth", "first-litre")
    }
    assert found.round.months == (5,)
    assert (found.round.from_, found.round.to) == ("2027-05-01", "2027-05-31")
    assert [(visit.visit, visit.position, visit.tap) for visit in found.visits] == [
        ("V-1", 1, "kitchen"),
        ("V-2", 2, "kitchen"),
    ]
    assert found.visits[0].draws == (
        {"draw": 1, "purpose": "compliance"},
        {"draw": 5, "purpose": "investigation"},
    )
    assert found.visits[1].draws[1] == {"draw": 2, "purpose": "blank", "kind": "blank"}
    assert isinstance(found.facts[2], RoundOpened)


def test_a_site_stands_in_the_pool_and_on_each_route_it_is_on():
    plan = small()
    plan["routes"].append({**plan["routes"][0], "id": "R-2", "visits": []})
    plan["routes"][1]["visits"] = [{**plan["routes"][0]["visits"][0], "id": "V-3"}]
    listed = [fact for fact in read(plan).facts if isinstance(fact, SiteListed)]
    assert [(fact.site, fact.route) for fact in listed] == [
        ("T-1", ""),
        ("T-2", ""),
        ("T-1", "R-1"),
        ("T-2", "R-1"),
        ("T-1", "R-2"),
    ]


def test_private_text_enters_no_signed_part():
    for fact in read(small()).facts:
        signed = json.dumps(fact.data())
        assert not any(word in signed for word in ("Moonpail", "Crumblebee", "Whistlecomb"))
    listed = read(small()).sites[0]
    assert listed.private_part() == {"name": "Gwendra Moonpail", "address": "5 Crumblebee Way"}


def test_text_comes_in_one_unicode_form():
    plan = small()
    put(plan, "round.title", "  Cafe\u0301\u00a0 round\n")
    assert read(plan).round.title == "Caf\u00e9 round"


def test_unknown_keys_are_left_out_and_named():
    plan = small()
    put(plan, "sites.0.adress", "9 Crumblebee Way")
    put(plan, "round.name", "Gwendra Moonpail")
    plan["comment"] = {"deep": [1]}
    plan["rehearsal"] = {"anything": 1}
    found = read(plan)
    notes = [(note.kind, note.path, note.value) for note in found.notes]
    assert ("key-left-out", "sites[0]", "adress") in notes
    assert ("key-left-out", "round", "name") in notes
    assert ("key-left-out", "", "comment") in notes
    assert not any("rehearsal" in note for note in notes)
    assert "9 Crumblebee" not in repr(found.notes) + repr(found.facts)


def test_a_rule_or_protocol_outside_its_window_is_noted_not_refused():
    kinds = [(note.kind, note.value) for note in read(small()).notes]
    assert kinds == [("protocol-outside-in-force", "first-and-fifth")]
    plan = small()
    put(plan, "round.rule", "us-2024")
    assert ("rule-outside-in-force", "us-2024") in {(n.kind, n.value) for n in read(plan).notes}


def test_another_convention_asks_who_allowed_it():
    plan = small()
    put(plan, "round.convention", "half-up")
    assert "convention-unsigned" in {note.kind for note in read(plan).notes}
    put(plan, "round.convention_by", "State office, letter of 2027-01-08")
    assert "convention-unsigned" not in {note.kind for note in read(plan).notes}


def test_a_route_in_a_month_that_does_not_count_is_noted():
    plan = small()
    put(plan, "round.to", "2027-06-30")
    put(plan, "routes.0.day", "2027-06-01")
    assert "month-not-counted" in {note.kind for note in read(plan).notes}


def test_a_round_may_last_one_day():
    plan = small()
    put(plan, "round.from", "2027-05-04")
    put(plan, "round.to", "2027-05-04")
    assert read(plan).routes[0].day == "2027-05-04"


def test_a_route_may_be_empty():
    plan = small()
    put(plan, "routes.0.visits", [])
    found = read(plan)
    assert [note.kind for note in found.notes] == ["route-empty"]
    assert found.visits == ()
    assert found.round.protocols == {}


def test_poured_litres_have_bottles_where_the_round_keeps_them():
    plan = small()
    put(plan, "round.keep_poured", True)
    plan["routes"][0]["visits"][0]["draws"].append({"draw": 3, "purpose": "investigation"})
    assert [draw["draw"] for draw in read(plan).visits[0].draws] == [1, 3, 5]


def test_a_visit_takes_one_field_blank():
    plan = small()
    more = {"draw": 3, "kind": "blank", "purpose": "blank"}
    plan["routes"][0]["visits"][1]["draws"].append(more)
    where = "routes[0].visits[1].draws[2].purpose"
    assert faults_of(json.dumps(plan).encode()) == {("blank-twice", where)}


def test_a_duplicate_takes_a_number_above_the_protocols_own():
    plan = small()
    more = {"draw": 6, "kind": "duplicate", "purpose": "duplicate"}
    plan["routes"][0]["visits"][0]["draws"].append(more)
    assert read(plan).visits[0].draws[2] == more


def test_the_same_file_gives_the_same_facts():
    assert read(small()) == read(small())


def test_every_zone_that_a_round_may_name_is_one():
    assert {"America/Boise", "Europe/Berlin", "Australia/Lord_Howe", "UTC"} <= _zones()
    for zone in sorted(_zones())[::25]:
        assert zoneinfo.ZoneInfo(zone).key == zone


def test_a_misspelt_zone_is_answered_with_the_near_one():
    plan = small()
    put(plan, "round.zone", "america/lord howe")
    with pytest.raises(BadFile) as bad:
        read(plan)
    assert "America/Boise" in bad.value.faults[0].line
    put(plan, "round.zone", "los angeles")
    with pytest.raises(BadFile) as bad:
        read(plan)
    assert "America/Los_Angeles" in bad.value.faults[0].line


def test_the_clean_day_reads_clean():
    found = read_round(clean_day(), "clean-day.json")
    assert [note.kind for note in found.notes] == ["protocol-outside-in-force"]
    purposes = [draw["purpose"] for visit in found.visits for draw in visit.draws]
    assert len(found.visits) == 8
    assert len(purposes) == 11
    assert purposes.count("blank") == purposes.count("request") == 1
    first_litres = [visit for visit in found.visits if visit.protocol == "first-litre"]
    compliance = [v for v in first_litres if v.draws[0]["purpose"] == "compliance"]
    assert len(compliance) == 5
    assert {role for person in found.people for role in person.roles} == {
        "sampler",
        "clerk",
        "coordinator",
    }


def leaves(part: Any, way: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Return the way to every value of a file, blocks and lists included."""
    found = [way] if way else []
    if not isinstance(part, dict | list):
        return found
    for key, value in part.items() if isinstance(part, dict) else enumerate(part):
        found += leaves(value, (*way, key))
    return found


CLEAN = json.loads(clean_day())
PLAN_LEAVES = [way for way in leaves(CLEAN) if way[0] != "rehearsal"]
JUNK = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text()
    | st.sampled_from(["2027-05-04", "V-0401", "blank", "..", "\ud800", "first-litre", "1e400"]),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=5,
)


@given(st.sampled_from(PLAN_LEAVES), JUNK)
def test_junk_in_any_one_place_is_a_fault_or_nothing_worse(way, junk):
    plan = json.loads(clean_day())
    inner = plan
    for key in way[:-1]:
        inner = inner[key]
    inner[way[-1]] = junk
    try:
        read_round(json.dumps(plan).encode(), "clean-day.json")
    except BadFile as bad:
        for fault in bad.faults:
            assert_whole(fault)


@given(st.binary(max_size=200))
def test_bytes_of_any_kind_are_refused_in_words(data):
    with pytest.raises(BadFile):
        read_round(data, "bytes")
