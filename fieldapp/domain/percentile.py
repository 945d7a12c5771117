"""The 90th percentile of a monitoring period, by each published reading of a broken rank.

The rule numbers the levels upward from 1 and takes the one whose number is 0.9 times the
count. It does not say what to do when that is no whole number, and no national convention
exists; the conventions below differ, and may stand on different sides of a limit.
Every level is a Decimal in µg/L and every step is exact.

Source: 40 CFR 141.80(c)(3), quoted in EPA memorandum WSG 173 (9 March 2004). Five levels: the
mean of the two highest; fewer than five: the highest (state worksheets that quote the rule).
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from decimal import Decimal, Inexact, localcontext

from fieldapp.domain.errors import RuleBroken

FIVE = 5

# Enough digits for any level to stay exact; Inexact is trapped in case it should not be.
_DIGITS = 200


class UnknownConvention(RuleBroken):
    """No convention has this name; ``known`` lists those there are."""

    kind = "unknown-convention"


class ConventionSilent(RuleBroken):
    """The table that ``convention`` rests on says nothing of ``n`` levels."""

    kind = "convention-silent"


@dataclass(frozen=True, slots=True)
class Ninetieth:
    """A 90th percentile: ``value`` in µg/L, found at ``rank`` of ``n`` levels, rising from 1."""

    value: Decimal
    rank: Decimal
    n: int
    convention: str


def ninetieth(levels: Sequence[Decimal], convention: str) -> Ninetieth | None:
    """Return the 90th percentile of ``levels``, or None when there are none.

    Raises:
        UnknownConvention: The convention is none of ``CONVENTIONS`` or ``TABLES``.
        ConventionSilent: The convention is a table that does not reach to this many levels.
    """
    rank_by(convention, FIVE)
    if not levels:
        return None
    rank = rank_taken(convention, len(levels))
    return Ninetieth(_level_at(sorted(levels), rank), rank, len(levels), convention)


def exceeds(value: Decimal, limit: Decimal) -> bool:
    """Say whether ``value`` is above ``limit``, both in µg/L; an equal one is not.

    The value is compared unrounded. Whether a state rounds it first is not settled.

    Source: 10 NYCRR 5-1.40(b); Kansas Department of Health and Environment, lead and copper FAQ.
    """
    return value > limit


def rank_taken(convention: str, n: int) -> Decimal:
    """Return the rank at which the level is taken from ``n`` levels, rising from 1.

    Half a rank is the mean of its two neighbours. Five levels and fewer follow their own
    clause, which is the same under every convention.
    """
    if n < FIVE:
        return Decimal(n)
    if n == FIVE:
        return Decimal("4.5")
    return rank_by(convention, n)


def rank_by(convention: str, n: int) -> Decimal:
    """Return how ``convention`` reads 0.9 times ``n``, leaving the clause for few levels aside."""
    reading = CONVENTIONS.get(convention) or TABLES.get(convention)
    if reading is None:
        raise UnknownConvention(convention=convention, known=(*CONVENTIONS, *TABLES))
    return reading(n)


def _interpolated(n: int) -> Decimal:
    return Decimal(9 * n) / 10


def _half_up(n: int) -> Decimal:
    return Decimal((9 * n + 5) // 10)


def _half_even(n: int) -> Decimal:
    whole, tenths = divmod(9 * n, 10)
    up = tenths > FIVE or (tenths == FIVE and whole % 2 == 1)
    return Decimal(whole + up)


def _ceiling(n: int) -> Decimal:
    return Decimal((9 * n + 9) // 10)


# Up to this many levels: so far below the highest is the rank.
_WORKSHEET_52M = ((7, "0.5"), (12, "1"), (17, "1.5"), (22, "2"))


def _table_ca(n: int) -> Decimal:
    for up_to, below_highest in _WORKSHEET_52M:
        if FIVE <= n <= up_to:
            return n - Decimal(below_highest)
    raise ConventionSilent(convention="table-ca", n=n)


def _top_two(n: int) -> Decimal:
    if 1 < n < 10:
        return n - Decimal("0.5")
    raise ConventionSilent(convention="top-two", n=n)


# What a rule or a round may name.
CONVENTIONS: dict[str, Callable[[int], Decimal]] = {
    # Between the two neighbours. Study notes "Calculating 90th percentiles"; the only one that
    # yields the five-level clause by itself.
    "interpolate": _interpolated,
    # To the nearest, a half upward. State handout "Lead and Copper 90th Percentile Examples".
    "half-up": _half_up,
    # To the nearest, a half to the even rank (12.5 -> 12, 13.5 -> 14).
    # State handout "Calculating or Determining the 90th Percentile".
    "half-even": _half_even,
    # The next rank up: "more than ten per cent are above". From memory, check.
    "ceiling": _ceiling,
}

# Published tables that end; for showing beside the others.
TABLES: dict[str, Callable[[int], Decimal]] = {
    # California, "Lead and Copper Results Worksheet 52M", table 2.
    "table-ca": _table_ca,
    # Fewer than ten sites. Leaflet "Understanding Test Results and Calculating the 90th
    # Percentile".
    "top-two": _top_two,
}


def _level_at(rising: Sequence[Decimal], rank: Decimal) -> Decimal:
    whole = int(rank)
    lower = rising[whole - 1]
    if rank == whole:
        return lower
    with localcontext() as context:
        context.prec = _DIGITS
        context.traps[Inexact] = True
        return lower + (rank - whole) * (rising[whole] - lower)
