"""How long the water has stood before a fill, from the recorded uses of water."""

from dataclasses import dataclass, replace
from datetime import datetime, timedelta

from fieldapp.domain.protocols.seen import Use
from fieldapp.domain.protocols.steps import StandRule
from fieldapp.domain.stand import Mark, Stand, between, judge, stated

NOTHING = timedelta(0)
PASSES, FAILS, DOUBT, LONG = "passes", "fails", "ask", "long"


@dataclass(frozen=True, slots=True)
class Stood:
    """A stand that ends at a draw, or now.

    ``stand`` is None where nobody can say since when: then only ``shortest`` is known.
    ``unsure`` says that somebody stated not to know. ``position`` is that of the last use told.
    """

    stand: Stand | None
    shortest: timedelta
    since: datetime
    end: datetime
    bound: timedelta
    unsure: bool
    position: int
    evidence: str

    def verdict(self, rule: StandRule) -> str:
        """Say whether the stand passes, fails, must be asked about, or is long."""
        if self.stand is None:
            return PASSES if self.shortest >= rule.minimum else DOUBT
        found = judge(self.stand, rule.minimum, rule.question_above)
        return LONG if found == "ask-long" else found

    def enough_at(self, rule: StandRule) -> datetime:
        """Return the instant at which the shortest possible stand is enough."""
        measured = self.stand is not None and self.stand.basis == "measured"
        if self.shortest > NOTHING or measured:
            return self.end + (rule.minimum - self.shortest)
        return self.since + self.bound + rule.minimum

    def deviation(self, rule: StandRule) -> str:
        """Return the kind of deviation that a draw after this stand is, empty for none."""
        if self.unsure or self.stand is None or self.stand.contradictory:
            return "stand-unknown"
        verdict = self.verdict(rule)
        above = rule.question_above
        if verdict == DOUBT and above is not None and self.stand.longest > above:
            return "stand-unknown"  # it may be too short and may be too long
        kinds = {FAILS: "stand-short", DOUBT: "stand-doubtful", LONG: "stand-long"}
        return kinds.get(verdict, "")

    def values(self, rule: StandRule) -> dict[str, object]:
        """Return what a sentence about it needs; ``longest`` is None where it is not known."""
        return {
            "minimum": rule.minimum,
            "question_above": rule.question_above,
            "shortest": self.shortest,
            "longest": self.stand.longest if self.stand else None,
            "basis": self.stand.basis if self.stand else "stated",
        }


class Uses:
    """The uses of water told so far, in the order of telling; a later use begins the stand anew.

    Of uses with bounds, the last lies between the latest beginning and the latest end. Somebody
    who does not know is answered by whoever states it afterwards, not by what was stated before.
    """

    def __init__(self) -> None:
        self._known: Use | None = None  # the one that ends last
        self._earliest: datetime | None = None
        self._unknown: Use | None = None
        self._position = -1

    def add(self, use: Use) -> None:
        """Count one more use."""
        self._position = max(self._position, use.position)
        if use.earliest is None:
            self._unknown = _later(self._unknown, use)
            return
        self._known, self._unknown = _later(self._known, use), None
        self._earliest = max(self._earliest or use.earliest, use.earliest)

    def stood(self, end: datetime, mark: Mark | None, bound: timedelta) -> Stood | None:
        """Return the stand from the last use to ``end``, None where no use is told."""
        if self._unknown:
            last = _later(self._known, self._unknown)
        elif self._known:
            last = self._known
        else:
            return None
        stand = _stand(last, self._earliest, end, mark, bound) if self._earliest else None
        return Stood(
            stand=stand,
            shortest=stand.shortest if stand else max(end - last.latest - bound, NOTHING),
            since=last.latest,
            end=end,
            bound=bound,
            unsure=self._unknown is not None,
            position=self._position,
            evidence=last.hash,
        )


def _later(one: Use | None, other: Use) -> Use:
    return other if one is None or one.latest <= other.latest else one


def _stand(
    last: Use, earliest: datetime, end: datetime, mark: Mark | None, bound: timedelta
) -> Stand:
    if last.mark and mark and earliest == last.latest:
        return between(last.mark, mark, offset_bound=bound)
    told = stated(earliest, last.latest, end, offset_bound=bound)
    return replace(told, basis="metered") if last.basis == "metered" else told
