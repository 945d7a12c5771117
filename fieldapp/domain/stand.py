"""Standing time as evidence: how long the water stood at least and at most, and who says so."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Literal

from fieldapp.domain.timetext import in_utc

Basis = Literal["measured", "clocked", "stated", "metered"]
Verdict = Literal["passes", "fails", "ask", "long", "ask-long"]

NOTHING = timedelta(0)

# Within this the wall clock and the counter tell one story; beyond it the clock was set or the
# counter slept. Our choice: drift over 16 h is under 6 s, the steps seen are minutes and hours.
ACCEPTED_GAP = timedelta(seconds=60)
# Wall and counter are read one after the other, each to a millisecond. By how much they are apart
# is taken to the second, or a deadline would tremble from one look to the next. Our choice.
APART = timedelta(seconds=1)


@dataclass(frozen=True, slots=True)
class Mark:
    """A moment as a device read it.

    ``at`` is its wall clock, aware; ``mono_ms`` its counter in ms, one that goes on in sleep, or
    None where it has none; ``boot`` names the run of the machine in which the counter counts.
    """

    at: datetime
    mono_ms: int | None
    boot: str


@dataclass(frozen=True, slots=True)
class Stand:
    """How long water stood: the shortest and longest that the evidence allows.

    ``contradictory`` says that the evidence has it end before it began; then both are zero and
    nothing is known.
    """

    basis: Basis
    shortest: timedelta
    longest: timedelta
    contradictory: bool = False


def between(start: Mark, end: Mark, *, offset_bound: timedelta = NOTHING) -> Stand:
    """Return the stand between two marks of devices.

    Within one boot, and with both clocks in step, the counter measured it. Where they differ
    it lies between what they say; after another boot only the wall clocks know, give or take
    ``offset_bound``, the most by which the two wall readings may be out against each other.
    """
    wall = in_utc(end.at) - in_utc(start.at)
    walls = (wall - offset_bound, wall + offset_bound)
    mono = _counted(start, end, wall)
    if mono is None:
        return _bracketed("clocked", *walls)
    if abs(wall - mono) <= ACCEPTED_GAP:
        return _bracketed("measured", mono, mono)
    return _bracketed("clocked", min(mono, *walls), max(mono, *walls))


def stated(
    earliest: datetime, latest: datetime, end: datetime, *, offset_bound: timedelta = NOTHING
) -> Stand:
    """Return the stand since a last use that a person puts between ``earliest`` and ``latest``.

    ``offset_bound`` is the most by which the clock that read ``end`` may be out: against a
    person's clock its error does not cancel.
    """
    first, last = sorted((in_utc(earliest), in_utc(latest)))
    return _bracketed(
        "stated", in_utc(end) - last - offset_bound, in_utc(end) - first + offset_bound
    )


def judge(stand: Stand, minimum: timedelta, maximum: timedelta | None = None) -> Verdict:
    """Say whether a stand is long enough, and not too long where ``maximum`` is given.

    It passes when the shortest possible is enough and fails when the longest is too short; in
    between the sampler is asked. Likewise above: ``long`` when even the shortest is too long,
    ``ask-long`` when it may be. Both limits are themselves allowed.
    """
    if stand.contradictory:
        return "ask"
    if stand.longest < minimum:
        return "fails"
    if stand.shortest < minimum:
        return "ask"
    if maximum is None or stand.longest <= maximum:
        return "passes"
    return "long" if stand.shortest > maximum else "ask-long"


def earliest_draw(start: datetime, minimum: timedelta) -> datetime:
    """Return the first moment, in UTC, at which water standing since ``start`` stood enough."""
    return in_utc(start) + minimum


def latest_of(starts: Iterable[datetime]) -> datetime | None:
    """Return the latest of ``starts`` in UTC, None of none: a later use begins the stand anew."""
    return max(map(in_utc, starts), default=None)


def _counted(start: Mark, end: Mark, wall: timedelta) -> timedelta | None:
    """Return what the counter counted, as far from the wall clock as whole seconds say."""
    if start.boot != end.boot or start.mono_ms is None or end.mono_ms is None:
        return None
    apart = wall - timedelta(milliseconds=end.mono_ms - start.mono_ms)
    return wall - round(apart / APART) * APART


def _bracketed(basis: Basis, shortest: timedelta, longest: timedelta) -> Stand:
    return Stand(basis, max(shortest, NOTHING), max(longest, NOTHING), longest < NOTHING)
