"""Every kind of deviation with the direction in which it bends the measured lead, and its source.

A deviation says only what was not done as the protocol says; its sentence is in ``words.py``.
"From memory, check" marks what was not read anywhere when this was written; "reasoned" what
follows from the rest of the table.
"""

from dataclasses import dataclass
from typing import Literal

Bias = Literal["low", "high", "either"]

LOW: Bias = "low"
HIGH: Bias = "high"
EITHER: Bias = "either"

MEMORY = "from memory, check"
REASONED = "reasoned here, check"
HOMEOWNERS = (
    "EPA, Instructions for Homeowners: Lead and Copper Tap Sample Collection, September 2024"
)
DIRECTIONS = "EPA, Suggested Directions for Homeowner Tap Sample Collection Procedures"
RECOMMENDED = (
    "EPA memorandum, Clarification of Recommended Tap Sampling Procedures, 29 February 2016"
)
AERATORS = "EPA memorandum WSG 178 on aerators, 20 October 2006"
SCHOOLS = "EPA, 3Ts for Reducing Lead in Drinking Water, modules 4 and 5, October 2018"


@dataclass(frozen=True, slots=True)
class DeviationKind:
    """One kind of deviation. ``stated``: a person may press it; else only the program finds it."""

    kind: str
    bias: Bias
    source: str
    stated: bool = False


_ALL = (
    # the stand
    DeviationKind("stand-short", LOW, MEMORY, stated=True),
    DeviationKind("stand-doubtful", LOW, f"{REASONED}: as stand-short, where it may be short"),
    DeviationKind("stand-long", HIGH, f"{MEMORY}; lead levels off with time", stated=True),
    DeviationKind(
        "stand-unknown",
        EITHER,
        f"{REASONED}: a short stand bends low, a long one high",
        stated=True,
    ),
    DeviationKind("tap-used-in-stand", LOW, DIRECTIONS, stated=True),
    DeviationKind("pre-flush", LOW, f"{HOMEOWNERS}; {RECOMMENDED}", stated=True),
    DeviationKind("run-short", EITHER, f"{REASONED}: older water is left in the pipe"),
    # the tap
    DeviationKind("aerator-cleaned", LOW, f"{AERATORS}; {RECOMMENDED}", stated=True),
    DeviationKind(
        "aerator-removed", EITHER, f"{AERATORS}; a burst of particles {MEMORY}", stated=True
    ),
    DeviationKind("filter-in-place", LOW, "40 CFR 141.86(a), opening", stated=True),
    DeviationKind(
        "softener-in-place", EITHER, f"{HOMEOWNERS}; that it may corrode more {MEMORY}", stated=True
    ),
    DeviationKind("hot-water", HIGH, "Wisconsin NR 809.546(1)(a)4; EPA advice", stated=True),
    DeviationKind("not-drinking-tap", EITHER, f"{REASONED}: a tap that few people use stands long"),
    DeviationKind(
        "plumbing-work", HIGH, f"{HOMEOWNERS} (to be noted); direction {MEMORY}", stated=True
    ),
    # the filling
    DeviationKind("low-flow", LOW, f"{SCHOOLS}; profile sampling of particles, 2014", stated=True),
    DeviationKind("narrow-mouth", LOW, SCHOOLS, stated=True),
    DeviationKind("interrupted-flow", EITHER, MEMORY, stated=True),
    DeviationKind(
        "fill-below", EITHER, f"{REASONED}: high where the fixture is the source, else low"
    ),
    DeviationKind(
        "fill-over", LOW, f"{REASONED}; Minnesota, General sampling requirements, app. A"
    ),
    DeviationKind(
        "fill-spilled", LOW, f"{REASONED}; Minnesota, General sampling requirements, app. A"
    ),
    DeviationKind(
        "litres-shifted", EITHER, f"{REASONED}: a litre caught short moves those behind it"
    ),
    # the bottles and their order
    DeviationKind("wrong-order", EITHER, f"{REASONED}: one pipe's lead is shown as another's"),
    DeviationKind("wrong-bottle", EITHER, f"{REASONED}: as wrong-order"),
    DeviationKind("filled-twice", EITHER, f"{REASONED}: a second filling is later water"),
    DeviationKind("poured-instead", EITHER, f"{REASONED}: a litre to be kept is lost"),
    # the visit
    DeviationKind("drawn-after-stop", EITHER, f"{REASONED}: an answer had ended the visit"),
    DeviationKind("not-asked", EITHER, f"{REASONED}: what was not asked is not known"),
    DeviationKind("not-as-expected", EITHER, REASONED),
    DeviationKind("other", EITHER, REASONED, stated=True),
)

DEVIATIONS: dict[str, DeviationKind] = {one.kind: one for one in _ALL}
"""Every kind this program knows, in the order in which a page offers them."""


def bias_of(kind: str) -> Bias:
    """Return the direction of a kind; ``either`` of one that a newer program recorded."""
    known = DEVIATIONS.get(kind)
    return known.bias if known else EITHER


def stated_kinds() -> tuple[str, ...]:
    """Return the kinds that a person may press under "something is different"."""
    return tuple(kind for kind, one in DEVIATIONS.items() if one.stated)
