"""The parts of a protocol document: one frozen class a kind of step, and its two rules."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import timedelta
from types import MappingProxyType

CONSENT = "consent"
"""The question that ``occupant.agreed`` answers."""
LAST_USE = "last-use"
"""The question that ``water.used`` answers: a statement with bounds, not a choice (R4)."""

NONE: Mapping[str, str] = MappingProxyType({})


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """What every step has. ``why`` is plain English, two sentences, translated by its text."""

    id: str
    why: str = ""
    source: str = ""
    breach: str = "ask"  # bar, ask, note


@dataclass(frozen=True, slots=True, kw_only=True)
class Ask(Step):
    """One question; its first answer is the ordinary one.

    ``stops_if`` names for an answer the outcome with which it ends the visit; ``deviates`` the
    kind of deviation that an answer is. ``says`` and ``words`` are the document's own English.
    """

    question: str
    says: str = ""
    answers: tuple[str, ...] = ()
    stops_if: Mapping[str, str] = field(default_factory=lambda: NONE)
    deviates: Mapping[str, str] = field(default_factory=lambda: NONE)
    words: Mapping[str, str] = field(default_factory=lambda: NONE)


@dataclass(frozen=True, slots=True, kw_only=True)
class Look(Step):
    """Something to look at, and what should be seen."""

    at: str
    expect: str
    says: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Run(Step):
    """Water to waste for at least ``minimum``."""

    minimum: timedelta
    flow: str = "as-used"
    water: str = "cold"


@dataclass(frozen=True, slots=True, kw_only=True)
class StandWait(Step):
    """A stand inside the visit, before the next fill."""

    minimum: timedelta
    maximum: timedelta | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Fill(Step):
    """One filling. Without ``analyse`` no result is expected; not ``keep``: poured away (R3).

    ``mouth_min_mm`` is the least outer diameter of the bottle's mouth, 0 where nothing is asked.
    """

    draw: int
    volume_ml: int
    kind: str
    mouth_min_mm: int = 0
    analyse: tuple[str, ...] = ()
    keep: bool = True
    running_on: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Measure(Step):
    """A reading to take, within so long of the draw."""

    quantity: str
    unit: str
    within: timedelta | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Photograph(Step):
    """A photo to take; ``wanted`` says whether the step is due at all or only offered."""

    of: str
    wanted: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Sign(Step):
    """A name to sign with: the ``sampler``'s or the ``resident``'s."""

    who: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StandRule:
    """The stand before the first draw.

    ``quiet`` says where no water may run: at the ``tap`` or in the ``building``. The engine counts
    every stated use against both, for nobody can tell from a kitchen which pipes it moved.
    """

    minimum: timedelta
    question_above: timedelta | None = None
    quiet: str = "building"
    flush_before: str = "forbidden"
    breach: str = "ask"
    why: str = ""
    source: str = ""
    question_source: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class TapRule:
    """How the tap is to be found and left."""

    water: str = "cold"
    aerator: str = "leave"
    filter: str = "exclude"
    flow: str = "as-used"
    source: str = ""
