"""The 90th percentile, against values that others have published and against numpy."""

import random
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.levels import read_level
from fieldapp.domain.percentile import (
    CONVENTIONS,
    TABLES,
    ConventionSilent,
    UnknownConvention,
    exceeds,
    ninetieth,
    rank_by,
    rank_taken,
)
from tests.check_values import named, values

CASES = values("percentile")
levels_in_whole = st.lists(st.integers(0, 500).map(Decimal), min_size=1, max_size=60)


def micrograms(value):
    return [read_level(text, value["unit"]).value for text in value["levels"]]


def in_unit(text, value):
    return read_level(text, value["unit"]).value


@pytest.mark.parametrize("value", CASES, ids=named)
def test_each_convention_gives_the_published_level(value):
    levels = micrograms(value)
    for convention, level in value["p90"].items():
        found = ninetieth(levels, convention)
        assert (convention, found.value) == (convention, in_unit(level, value))
        assert (found.n, found.convention) == (len(levels), convention)
    assert set(CONVENTIONS) <= set(value["p90"])
    assert ninetieth(levels, "interpolate").rank == Decimal(value["rank"])


@pytest.mark.parametrize("value", CASES, ids=named)
def test_the_verdict_is_the_published_one(value):
    level = ninetieth(micrograms(value), "interpolate").value
    for limit, verdict in value["limits"].items():
        assert exceeds(level, in_unit(limit, value)) is verdict


@pytest.mark.parametrize("value", [v for v in CASES if "flips" in v], ids=named)
def test_some_sets_exceed_under_some_conventions_only(value):
    levels = micrograms(value)
    for limit, above in value["flips"].items():
        found = {
            c for c in value["p90"] if exceeds(ninetieth(levels, c).value, in_unit(limit, value))
        }
        assert found == set(above)


@pytest.mark.parametrize("value", CASES, ids=named)
def test_the_order_in_which_results_come_makes_no_difference(value):
    levels = micrograms(value)
    shuffled = random.Random(5).sample(levels, len(levels))
    for convention in value["p90"]:
        assert ninetieth(shuffled, convention) == ninetieth(levels, convention)


@pytest.mark.parametrize("value", values("ranks"), ids=named)
def test_each_convention_reads_the_published_rank(value):
    for convention, rank in value["rank"].items():
        assert (convention, rank_by(convention, value["n"])) == (convention, Decimal(rank))


@pytest.mark.parametrize(
    ("convention", "method"),
    [
        ("interpolate", "interpolated_inverted_cdf"),
        ("ceiling", "inverted_cdf"),
        ("half-even", "closest_observation"),
    ],
)
def test_three_conventions_agree_with_numpy_for_every_count(convention, method):
    for n in range(2, 501):
        outside = np.quantile(np.arange(1, n + 1), 0.9, method=method)
        assert float(rank_by(convention, n)) == pytest.approx(float(outside), abs=1e-9), n


@pytest.mark.parametrize("convention", CONVENTIONS)
def test_of_five_results_the_two_highest_are_averaged_under_every_convention(convention):
    levels = [Decimal(n) for n in (1, 2, 3, 10, 15)]
    assert ninetieth(levels, convention).value == Decimal("12.5")
    assert rank_taken(convention, 5) == Decimal("4.5")


@pytest.mark.parametrize("convention", CONVENTIONS)
@pytest.mark.parametrize("n", [1, 2, 3, 4])
def test_of_fewer_than_five_results_the_highest_counts(convention, n):
    assert ninetieth([Decimal(level) for level in range(n)], convention).value == n - 1


@pytest.mark.parametrize("convention", [*CONVENTIONS, *TABLES])
def test_no_results_have_no_percentile_rather_than_zero(convention):
    assert ninetieth([], convention) is None


@pytest.mark.parametrize("levels", [[], [Decimal(1)]])
def test_an_unknown_convention_is_refused_even_for_no_results(levels):
    with pytest.raises(UnknownConvention) as caught:
        ninetieth(levels, "linear")
    assert "interpolate" in caught.value.values["known"]


@pytest.mark.parametrize(("convention", "n"), [("table-ca", 23), ("top-two", 10)])
def test_a_table_that_ends_says_so_instead_of_guessing(convention, n):
    with pytest.raises(ConventionSilent) as caught:
        ninetieth([Decimal(1)] * n, convention)
    assert caught.value.values == {"convention": convention, "n": n}


def counts_where_the_verdict_is_not_more_than_ten_per_cent(convention):
    """Return the n for which some count of results above the level is judged the other way."""
    found = []
    for n in range(6, 18):
        sets = [[Decimal(0)] * (n - above) + [Decimal(1)] * above for above in range(n + 1)]
        verdicts = [ninetieth(levels, convention).value > Decimal("0.5") for levels in sets]
        if verdicts != [above * 10 > n for above in range(n + 1)]:
            found.append(n)
    return found


def test_only_the_next_rank_up_means_more_than_ten_per_cent_above_the_level():
    apart = counts_where_the_verdict_is_not_more_than_ten_per_cent
    assert apart("ceiling") == []
    assert apart("half-up") == apart("half-even") == [6, 7, 8, 9, 16, 17]
    assert apart("interpolate") == [6, 7, 8, 9, 15, 16, 17]


def test_an_equal_level_is_no_exceedance():
    assert exceeds(Decimal("15"), Decimal("15.000")) is False
    assert exceeds(Decimal("15.0000000000000000000000000001"), Decimal("15")) is True


def test_a_level_between_two_ranks_is_exact_whatever_its_digits():
    low, high = Decimal("0." + "3" * 40), Decimal("0." + "7" * 40)
    value = ninetieth([Decimal(0)] * 5 + [low, high], "interpolate").value
    assert Fraction(value) == Fraction(low) + Fraction(3, 10) * (Fraction(high) - Fraction(low))


@given(levels_in_whole, st.sampled_from(list(CONVENTIONS)))
def test_the_percentile_lies_among_the_results_and_ties_keep_their_ranks(levels, convention):
    found = ninetieth(levels, convention)
    assert min(levels) <= found.value <= max(levels)
    assert sum(level > found.value for level in levels) <= len(levels) / 10 + 1


@given(levels_in_whole, st.integers(0, 59), st.sampled_from(list(CONVENTIONS)))
def test_a_higher_result_never_lowers_the_percentile(levels, at, convention):
    raised = list(levels)
    raised[at % len(levels)] += 7
    assert ninetieth(raised, convention).value >= ninetieth(levels, convention).value
