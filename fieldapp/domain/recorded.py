"""A fact together with its envelope: who recorded it, where in which log, by which clock."""

from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta

from fieldapp.domain.facts.base import Done, Fact


@dataclass(frozen=True, slots=True)
class Press:
    """Where in which log an entry was recorded, and how the clock read then."""

    log: str
    seq: int
    at: datetime
    off: int
    mono: int
    boot: str


@dataclass(frozen=True, slots=True)
class Recorded:
    """One entry as the rules read it. ``at`` is aware UTC, ``off`` minutes east, ``mono`` ms.

    ``stands_for`` is, of a correction, the press of the entry that it corrects first of all.
    """

    fact: Fact
    hash: str
    log: str
    seq: int
    at: datetime
    off: int
    mono: int
    boot: str
    by: str
    act: str = ""
    replaces: str = ""
    stands_for: Press | None = None

    def in_place(self) -> "Recorded":
        """Return a correction in the place of what it corrects, so that it moves nothing."""
        was = self.stands_for
        if was is None:
            return self
        return replace(
            self, log=was.log, seq=was.seq, at=was.at, off=was.off, mono=was.mono, boot=was.boot
        )

    @property
    def done_at(self) -> datetime:
        """When it was done: as stated, else at the press."""
        if isinstance(self.fact, Done) and self.fact.done_at:
            return datetime.fromisoformat(self.fact.done_at).astimezone(UTC)
        return self.at


@dataclass(frozen=True, slots=True)
class Reading:
    """One reading of this node's clock: wall (aware UTC), offset in minutes, ms with sleep."""

    at: datetime
    off: int
    mono: int
    boot: str

    def since(self, earlier: datetime) -> timedelta:
        """Return how long ago that instant was by the wall clock."""
        return self.at - earlier
