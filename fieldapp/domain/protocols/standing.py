"""What ``where()`` answers: the step that is due, what bars it, the draws so far, the deviations.

Nothing here holds a sentence; ``words.py`` has one for every kind named below.
"""

from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

from fieldapp.domain.stand import Stand

STATES = ("planned", "open", "left", "closed")
DUE_KINDS = (
    "open",  # visit.opened or, when left, visit.resumed
    "ask",  # one question with its answers: one press an answer
    "last-use",  # water.used: a statement with bounds (R4)
    "wait",  # the stand before the visit, or a stand inside it, is not long enough yet
    "run",  # water to waste: start, then end
    "set",  # scan the bottles of the next fill or of the whole run of fills, in order
    "tap",  # all set: one press when the tap opens (only where several draws run on)
    "fill",  # fill; for a run of draws: one press when the tap is closed
    "blank",  # the field blank: scan, water lot, poured
    "sign",  # typed name
    "close",  # nothing left to do
    "over",  # the visit is closed
)


@dataclass(frozen=True, slots=True)
class Due:
    """The act that is due. ``step`` is the document's own id of the step ("" for open, close)."""

    kind: str
    step: str = ""
    question: str = ""
    answers: tuple[str, ...] = ()
    draws: tuple[int, ...] = ()  # the draws of this fill or run of fills, in order
    next_draw: int = 0  # for "set": the draw whose bottle is to be scanned now
    who: str = ""  # for "sign"
    minimum: timedelta | None = None  # for "run", "wait"
    since: datetime | None = None
    until: datetime | None = None  # when a wait or run is long enough
    here: bool = False  # for "wait": a stand inside the visit, measured in the kitchen
    why: str = ""
    source: str = ""
    says: str = ""  # for "ask", "last-use": the document's own question, plain English
    words: dict[str, str] = field(default_factory=dict)  # answer -> the document's own word


@dataclass(frozen=True, slots=True)
class Bar:
    """A rule against the act that is due. Beside it stand wait, leave and *it is already done*.

    ``breach`` is ``bar``, ``ask`` or ``note``; ``until`` the instant when it falls by itself.
    """

    rule: str
    breach: str
    deviation: str
    values: dict[str, Any] = field(default_factory=dict)
    until: datetime | None = None


@dataclass(frozen=True, slots=True)
class Deviation:
    """Something not done as the protocol says, with the direction in which it bends the result."""

    kind: str
    bias: str  # low, high, either
    draws: tuple[int, ...]  # empty: every draw of the visit
    detected: bool  # by the program, else stated by a person
    evidence: tuple[str, ...] = ()  # entry hashes
    reason: str = ""
    values: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class DrawStanding:
    """One draw of the rail. ``state`` is waiting, set, running, filled or poured."""

    draw: int
    kind: str  # first-draw, sequential, flushed, blank, duplicate …
    purpose: str
    volume_ml: int
    analyse: tuple[str, ...]
    keep: bool  # False: caught in order and poured away, no bottle, no label (R3)
    state: str
    bottle: str = ""
    fill: str = ""
    filled_at: datetime | None = None


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a visit stands. Holds no state of its own: the same facts give the same answer."""

    state: str
    due: Due
    number: int  # of the step that is due, from 1
    of: int  # steps in all
    bars: tuple[Bar, ...] = ()
    draws: tuple[DrawStanding, ...] = ()
    deviations: tuple[Deviation, ...] = ()
    stand: Stand | None = None  # the stand before the first draw, as known now
    stand_verdict: str = ""  # "", passes, fails, ask, long
    earliest_draw: datetime | None = None
    stopped: str = ""  # the answer that ends the visit (filter in place …): kind of outcome
    answers: dict[str, str] = field(default_factory=dict)  # question -> answer in force
    beyond: tuple[str, ...] = ()  # ids of steps that this program reads but cannot walk yet
