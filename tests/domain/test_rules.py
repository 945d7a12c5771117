"""Rule documents and the official figure: what enters it, at which level, and what does not."""

import random
from dataclasses import replace
from datetime import date
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.errors import Unknown
from fieldapp.domain.levels import Level, read_level
from fieldapp.domain.percentile import UnknownConvention
from fieldapp.domain.rules import (
    BadRule,
    Candidate,
    Period,
    all_rules,
    load,
    official,
    parse,
    ranked,
)
from fieldapp.domain.rules import __file__ as rules_file
from tests.check_values import named, values

MAY = Period(date(2027, 5, 1), date(2027, 5, 31), (5,))
CASES = values("answers")


def litre(site, micrograms, **other):
    """Return a compliance first litre with its lead result in µg/L, None where it has none."""
    fields = {
        "bottle": f"{site}-{other.get('draw', 1)}",
        "site": site,
        "visit": f"v-{site}",
        "draw": 1,
        "kind": "first-draw",
        "purpose": "compliance",
        "analyte": "lead",
        "level": None if micrograms is None else Level(Decimal(micrograms)),
        "collected_on": date(2027, 5, 4),
    }
    return Candidate(**(fields | other))


def fifth(site, level, **other):
    return litre(site, level, draw=5, kind="sequential", line="lead", **other)


def pair(site, first, fifth_level, **other):
    return [litre(site, first, line="lead", **other), fifth(site, fifth_level, **other)]


def lead(rule, *inputs, convention="interpolate", period=MAY):
    return official(load(rule), convention, inputs, period, "lead")


def reasons(answer):
    return {candidate.bottle: reason for candidate, reason in answer.left_out}


def drawn(value):
    """Return the candidates of a check value, in an order of their own."""
    found = []
    for number, text in enumerate(value["first"], start=1):
        rest = {
            "analyte": value["analyte"],
            "level": read_level(text, value["unit"]),
            "line": "lead" if "fifth" in value else "copper",
            "invalidated": number in value.get("invalidated", []),
        }
        found.append(litre(f"S-{number}", "0", **rest))
        if "fifth" in value:
            rest["level"] = read_level(value["fifth"][number - 1], value["unit"])
            found.append(litre(f"S-{number}", "0", draw=5, kind="sequential", **rest))
    random.Random(9).shuffle(found)
    return found


# The figure, against values worked out by hand


@pytest.mark.parametrize("value", CASES, ids=named)
def test_the_official_figure_is_the_one_worked_out_by_hand(value):
    answer = official(load(value["rule"]), "interpolate", drawn(value), MAY, value["analyte"])
    assert answer.value == read_level(value["value"], value["unit"]).value
    assert answer.rank == Decimal(value["rank"])
    assert answer.exceeds is value["exceeds"]


@pytest.mark.parametrize("value", [v for v in CASES if "half_pql_value" in v], ids=named)
def test_half_the_quantitation_level_is_another_policy_with_its_own_figure(value):
    rule = load(value["rule"])
    other = replace(rule, nondetects=replace(rule.nondetects, between="half-pql"))
    answer = official(other, "interpolate", drawn(value), MAY, value["analyte"])
    assert answer.value == read_level(value["half_pql_value"], value["unit"]).value


@pytest.mark.parametrize("value", CASES, ids=named)
def test_every_candidate_is_entered_or_left_out_and_none_twice(value):
    inputs = drawn(value)
    answer = official(load(value["rule"]), "interpolate", inputs, MAY, value["analyte"])
    told = [one.candidate for one in answer.entered] + [one for one, _ in answer.left_out]
    assert sorted(c.bottle for c in told) == sorted(c.bottle for c in inputs)
    assert answer.n == len(answer.entered)


@pytest.mark.parametrize("value", CASES, ids=named)
def test_the_order_in_which_results_come_makes_no_difference(value):
    inputs, rule = drawn(value), load(value["rule"])
    backward = official(rule, "interpolate", inputs[::-1], MAY, value["analyte"])
    assert backward == official(rule, "interpolate", inputs, MAY, value["analyte"])


def test_the_convention_of_the_round_decides_where_the_rank_is_broken():
    levels = ["0", "1", "2", "3", "6", "12", "20"]
    inputs = [litre(f"S-{n}", level) for n, level in enumerate(levels)]
    verdicts = {
        convention: lead("us-2020", *inputs, convention=convention).exceeds
        for convention in ("interpolate", "half-up", "half-even", "ceiling")
    }
    assert verdicts == {
        "interpolate": False,
        "half-up": False,
        "half-even": False,
        "ceiling": True,
    }


def test_the_answer_names_its_rule_convention_limit_and_count_above():
    answer = lead("us-2020", litre("S-1", "15"), litre("S-2", "16"), convention="half-up")
    assert (answer.rule, answer.analyte, answer.convention) == ("us-2020", "lead", "half-up")
    assert (answer.limit, answer.above, answer.n) == (Decimal(15), 1, 2)


def test_no_result_gives_no_figure_rather_than_zero():
    answer = lead("us-2020", litre("S-1", None))
    assert (answer.value, answer.rank, answer.exceeds, answer.n) == (None, None, None, 0)
    assert answer.waiting == 1


def test_lead_and_copper_are_reckoned_apart():
    copper = litre("S-1", "1900", analyte="copper")
    both = [litre("S-1", "3"), copper]
    assert lead("us-2020", *both).value == 3
    found = official(load("us-2020"), "interpolate", both, MAY, "copper")
    assert (found.value, found.exceeds, found.left_out) == (Decimal(1900), True, ())


# What does not enter, and why


@pytest.mark.parametrize(
    ("other", "reason"),
    [
        ({"purpose": "investigation"}, "not-compliance"),
        ({"purpose": "request"}, "not-compliance"),
        ({"purpose": "blank", "kind": "blank"}, "blank"),
        ({"purpose": "compliance", "kind": "blank"}, "blank"),
        ({"purpose": "duplicate", "kind": "first-draw"}, "duplicate"),
        ({"purpose": "compliance", "kind": "duplicate"}, "duplicate"),
        ({"draw": 2, "kind": "sequential"}, "draw-not-counted"),
        ({"draw": 2, "kind": "first-draw"}, "draw-not-counted"),
        ({"draw": 5, "kind": "sequential"}, "draw-not-counted"),
        ({"kind": "random-daytime"}, "draw-not-counted"),
        ({"kind": "flushed"}, "draw-not-counted"),
        ({"collected_on": date(2027, 4, 30)}, "outside-period"),
        ({"collected_on": date(2027, 6, 1)}, "outside-period"),
        ({"collected_on": None}, "date-unknown"),
        ({"decided_against": True}, "not-analysed"),
        ({"invalidated": True}, "invalidated"),
        ({"superseded": True}, "superseded"),
        ({"level": None}, "no-result"),
        ({"level": None, "received": False}, "not-received"),
        ({"level": None, "refused": True}, "refused"),
    ],
)
def test_what_does_not_count_is_left_out_with_its_reason(other, reason):
    odd = litre("S-9", "90", **other)
    answer = lead("us-2020", litre("S-1", "3"), odd)
    assert answer.value == 3
    assert answer.left_out == ((odd, reason),)


@pytest.mark.parametrize("day", [date(2027, 5, 1), date(2027, 5, 31)])
def test_the_first_and_the_last_day_of_the_period_count(day):
    assert lead("us-2020", litre("S-1", "3", collected_on=day)).n == 1


def test_a_month_in_which_the_round_does_not_draw_is_left_out():
    summer = Period(date(2027, 1, 1), date(2027, 12, 31), (6, 7, 8, 9))
    inputs = [
        litre("S-1", "3", collected_on=date(2027, 6, 1)),
        litre("S-2", "4", collected_on=date(2027, 5, 31)),
    ]
    assert reasons(lead("us-2020", *inputs, period=summer)) == {"S-2-1": "outside-months"}
    whole_year = Period(summer.first, summer.last)
    assert lead("us-2020", *inputs, period=whole_year).n == 2


def test_a_result_of_a_refused_or_unreceived_bottle_counts_all_the_same():
    # R9: a result leaves only by a decision before analysis or by the regulator.
    inputs = [litre("S-1", "3", received=False), litre("S-2", "20", refused=True)]
    assert lead("us-2020", *inputs).value == 20


def test_a_breach_of_the_protocol_counts_while_the_rule_says_so():
    rule = load("us-2020")
    broken = litre("S-1", "30", breached=True)
    assert official(rule, "interpolate", [broken], MAY, "lead").value == 30
    other = replace(rule, breach_counts=False)
    assert reasons(official(other, "interpolate", [broken], MAY, "lead")) == {"S-1-1": "breach"}


def test_a_site_visited_twice_gives_two_values():
    again = litre("S-1", "9", visit="second", bottle="again")
    answer = lead("us-2020", litre("S-1", "3"), again)
    assert (answer.n, answer.value) == (2, Decimal(9))


def test_of_two_results_of_one_draw_the_higher_stands():
    inputs = [litre("S-1", "3"), litre("S-1", "9", bottle="other")]
    answer = lead("us-2020", *inputs)
    assert (answer.n, answer.value) == (1, Decimal(9))
    assert reasons(answer) == {"S-1-1": "lower-of-same-draw"}


# Pairs


@pytest.mark.parametrize(("first", "other"), [("18", "4"), ("4", "18")])
def test_at_a_lead_line_the_higher_of_first_and_fifth_is_the_sites_value(first, other):
    answer = lead("us-2024", *pair("S-1", first, other))
    assert (answer.n, answer.value) == (1, Decimal(18))
    assert set(reasons(answer).values()) == {"lower-of-pair"}


def test_of_an_equal_pair_the_first_litre_stands():
    answer = lead("us-2024", *pair("S-1", "7", "7"))
    assert [one.candidate.draw for one in answer.entered] == [1]


@pytest.mark.parametrize("lost", [0, 1])
def test_half_a_pair_leaves_its_site_out_and_nothing_stands_in(lost):
    halves = pair("S-1", "18", "20")
    halves[lost] = replace(halves[lost], level=None)
    answer = lead("us-2024", litre("S-2", "2"), *halves)
    assert answer.value == 2
    kept = halves[1 - lost].bottle
    assert reasons(answer) == {halves[lost].bottle: "no-result", kept: "pair-incomplete"}


def test_a_first_litre_alone_is_half_a_pair_at_a_lead_line():
    answer = lead("us-2024", litre("S-1", "18", line="lead"))
    assert reasons(answer) == {"S-1-1": "pair-incomplete"}


def test_the_litres_between_a_pair_do_not_count_even_when_analysed():
    third = litre("S-1", "90", draw=3, kind="sequential", line="lead")
    answer = lead("us-2024", third, *pair("S-1", "3", "8"))
    assert (answer.n, answer.value) == (1, Decimal(8))
    assert reasons(answer)["S-1-3"] == "draw-not-counted"


def test_an_invalidated_half_takes_its_pair_with_it():
    first, other = pair("S-1", "18", "20")
    answer = lead("us-2024", first, replace(other, invalidated=True))
    assert reasons(answer) == {"S-1-5": "invalidated", "S-1-1": "pair-incomplete"}


def test_halves_of_two_visits_make_no_pair():
    first, _ = pair("S-1", "18", "20")
    _, other = pair("S-1", "18", "20", visit="another day")
    assert lead("us-2024", first, other).n == 0


def test_a_pair_taken_again_counts_where_its_first_half_was_lost():
    lost = litre("S-1", "40", line="lead")
    again = [
        replace(one, visit="again", bottle=f"{one.bottle}-again") for one in pair("S-1", "3", "8")
    ]
    assert lead("us-2024", lost, *again).value == 8


@pytest.mark.parametrize("line", ["copper", "unknown", "non-lead", "galvanised", ""])
def test_at_any_other_line_only_the_first_litre_counts(line):
    halves = [replace(one, line=line) for one in pair("S-1", "3", "20")]
    answer = lead("us-2024", *halves)
    assert answer.value == 3
    assert reasons(answer) == {"S-1-5": "draw-not-counted"}


@pytest.mark.parametrize("line", ["lead", "Lead", " LSL ", "part lead"])
def test_a_lead_line_is_known_by_its_name_in_any_case(line):
    halves = [replace(one, line=line) for one in pair("S-1", "3", "20")]
    assert lead("us-2024", *halves).value == 20


def test_copper_comes_from_the_first_litre_of_a_pair():
    first, other = (replace(one, analyte="copper") for one in pair("S-1", "300", "1400"))
    answer = official(load("us-2024"), "interpolate", [first, other], MAY, "copper")
    assert answer.value == 300
    assert reasons(answer) == {"S-1-5": "draw-not-counted"}


# At which level a result is ranked


@pytest.mark.parametrize(
    ("text", "detection", "as_measured", "half_pql", "how"),
    [
        ("ND", "0.5", "0", "0", "below-detection"),
        ("0.4", "0.5", "0", "0", "below-detection"),
        ("0.5", "0.5", "0.5", "2.5", "measured"),
        ("0", "", "0", "0", "below-detection"),
        ("4.9", "0.5", "4.9", "2.5", "measured"),
        ("4.9", "", "4.9", "2.5", "measured"),
        ("5", "0.5", "5", "5", "measured"),
        ("<2", "", "0", "0", "less-than"),
        ("<2", "0.5", "0", "0", "less-than"),
        ("<5", "", "0", "0", "less-than"),
        ("<20", "", "20", "20", "limit"),
    ],
)
def test_a_result_is_ranked_as_the_rules_policy_says(text, detection, as_measured, half_pql, how):
    policy, pql = load("us-2020").nondetects, Decimal(5)
    level = read_level(text, "ug/L", detection=detection)
    assert ranked(level, policy, pql) == (Decimal(as_measured), how)
    assert ranked(level, replace(policy, between="half-pql"), pql)[0] == Decimal(half_pql)


def test_a_policy_may_rank_less_than_at_its_limit():
    policy = replace(load("us-2020").nondetects, less_than="limit")
    assert ranked(read_level("<2", "ug/L"), policy, Decimal(5)) == (Decimal(2), "limit")


def test_a_coarse_less_than_cannot_hide_an_exceedance():
    assert lead(
        "us-2020", litre("S-1", "3"), litre("S-2", "0", level=Level(Decimal(20), "<"))
    ).exceeds


# Rules that know no percentile


def test_a_rule_that_judges_each_result_counts_those_above_and_has_no_percentile():
    each = replace(load("us-2020"), judges="each result")
    answer = official(each, "interpolate", [litre("S-1", "3"), litre("S-2", "16")], MAY, "lead")
    assert (answer.value, answer.rank, answer.exceeds) == (None, None, None)
    assert (answer.n, answer.above) == (2, 1)


# The documents


def test_the_shipped_rules_are_the_two_of_the_federal_text():
    assert [rule.id for rule in all_rules()] == ["us-2020", "us-2024"]
    assert load("us-2020").limit("lead").ug_per_l == 15
    assert load("us-2024").limit("lead").ug_per_l == 10
    assert {rule.limit("copper").ug_per_l for rule in all_rules()} == {Decimal(1300)}


def test_every_rule_names_its_convention_its_sources_and_that_no_national_convention_exists():
    for rule in all_rules():
        assert (rule.convention, rule.convention_note) == ("interpolate", "no national convention")
        limits = [limit.source for limit in rule.limits.values()]
        counts = [one.source for one in rule.counts]
        assert all([rule.source, rule.nondetects.source, rule.breach_source, *limits, *counts])


@pytest.mark.parametrize(
    ("day", "binding"),
    [
        (date(2024, 10, 29), []),
        (date(2024, 10, 30), ["us-2020"]),
        (date(2027, 10, 31), ["us-2020"]),
        (date(2027, 11, 1), ["us-2024"]),
        (date(2040, 1, 1), ["us-2024"]),
    ],
)
def test_on_each_day_the_rule_that_binds_is_known(day, binding):
    assert [rule.id for rule in all_rules() if rule.in_force_on(day)] == binding


@pytest.mark.parametrize("rule", ["us-2020", "us-2024"])
@pytest.mark.parametrize(
    ("people", "standard", "reduced"),
    [
        # Consulting engineers' guide to the 2024 rule, table of sites; the edges by hand.
        (100_001, 100, 50),
        (100_000, 60, 30),
        (10_001, 60, 30),
        (10_000, 40, 20),
        (3_301, 40, 20),
        (3_300, 20, 10),
        (501, 20, 10),
        (500, 10, 5),
        (101, 10, 5),
        (100, 5, 5),
        (25, 5, 5),
        (0, 5, 5),
    ],
)
def test_the_number_of_sites_follows_the_people_served(rule, people, standard, reduced):
    assert load(rule).sites_needed(people) == standard
    assert load(rule).sites_needed(people, reduced=True) == reduced


def test_an_unknown_rule_analyte_or_convention_is_refused_by_name():
    with pytest.raises(Unknown) as caught:
        load("us-1991")
    assert caught.value.values == {"what": "rule", "name": "us-1991"}
    with pytest.raises(Unknown) as caught:
        official(load("us-2020"), "interpolate", [], MAY, "nickel")
    assert caught.value.values == {"what": "analyte", "name": "nickel"}
    with pytest.raises(UnknownConvention):
        official(load("us-2020"), "table-ca", [], MAY, "lead")


def document(old="", new=""):
    with open(rules_file.replace("__init__.py", "us-2020.toml"), encoding="utf-8") as file:
        text = file.read()
    assert old in text
    return text.replace(old, new, 1)


@pytest.mark.parametrize(
    ("old", "new", "path", "why"),
    [
        ('id = "us-2020"', 'id = "us-2020"\ncolour = "blue"', "colour", "unknown-key"),
        ("[limits.lead]", "[limits.lead]\nmg_per_l = 1", "limits.lead.mg_per_l", "unknown-key"),
        ("from = 2024", "form = 2024", "in_force.form", "unknown-key"),
        ("take =", "takes =", "counts[1].take", "missing"),
        ("standard = 60", "usual = 60", "minimum[2].standard", "missing"),
        ("[nondetects]", "[non_detects]", "nondetects", "missing"),
        ('ug_per_l = "15"', "ug_per_l = 15.0", "limits.lead.ug_per_l", "form"),
        ('ug_per_l = "15"', 'ug_per_l = "NaN"', "limits.lead.ug_per_l", "form"),
        ('ug_per_l = "15"', 'ug_per_l = "-15"', "limits.lead.ug_per_l", "form"),
        ('ug_per_l = "15"', 'ug_per_l = "high"', "limits.lead.ug_per_l", "form"),
        ("count = true", 'count = "yes"', "breaches.count", "form"),
        ("draws = [1]", "draws = []", "counts[1].draws", "form"),
        ("draws = [1]", 'draws = ["1"]', "counts[1].draws", "form"),
        ("to = 2027-10-31", "to = 2024-10-29", "in_force.to", "form"),
        ("to = 2027-10-31", 'to = "2027-10-31"', "in_force.to", "form"),
        ("standard = 60", "standard = -60", "minimum[2].standard", "form"),
        ("standard = 60", "standard = true", "minimum[2].standard", "form"),
        ("people_over = 0\n", "people_over = 1\n", "minimum", "missing"),
        ('title = "', 'title = ""\nx = "', "title", "form"),
        ('"interpolate"', '"linear"', "convention", "choice"),
        ('"90th percentile"', '"median"', "judges", "choice"),
        ('between = "as-measured"', 'between = "half"', "nondetects.between", "choice"),
        ('id = "us-2020"', 'id = "us-2020', "", "toml"),
    ],
)
def test_a_document_that_says_what_it_cannot_is_refused_by_the_path_of_its_key(old, new, path, why):
    with pytest.raises(BadRule) as caught:
        parse(document(old, new))
    assert (caught.value.values["path"], caught.value.values["why"]) == (path, why)


def test_a_document_as_shipped_reads_back_as_its_rule():
    assert parse(document()) == load("us-2020")


@given(
    st.lists(
        st.tuples(st.integers(0, 40), st.integers(0, 40), st.booleans(), st.booleans()),
        min_size=1,
        max_size=12,
    )
)
def test_under_the_pair_rule_the_figure_is_never_below_that_of_the_first_litres(sites):
    halves = [
        half
        for n, (first, other, *_) in enumerate(sites)
        for half in pair(f"S-{n}", str(first), str(other))
    ]
    assert lead("us-2024", *halves).value >= lead("us-2020", *halves).value
