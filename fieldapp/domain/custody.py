"""One cooler's standing, told from the facts about it and its bottles; any order gives the same.

In custody means in somebody's hands, in sight after that, or under a seal that is whole.
Source: EPA Region V, "Manual of Custody and Non-Custody Sample Handling", 1978 (trade 5, READ S72).
"""

import hashlib
import secrets
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from fieldapp.domain.bottles import in_order
from fieldapp.domain.codes import ALPHABET
from fieldapp.domain.facts import (
    BottleFilled,
    BottleLocated,
    BottlePacked,
    BottleReceived,
    CoolerOpened,
    CoolerReopened,
    CoolerSealed,
    Fact,
    HandoverOffered,
    HandoverStated,
    ReceiptStated,
)
from fieldapp.domain.recorded import Recorded

COOLER_RANDOM = 6
"""Characters after ``C-``: 30 bits, so a year's coolers of one central hardly ever meet."""

UNPACKED_WITHIN = timedelta(hours=1)
"""An opened cooler is scanned empty within this; then what did not come out of it is missing.

Ours: a counter scans forty bottles in minutes, but is called away. Nothing waits that long where
as many bottles came out as were counted.
"""


@dataclass(frozen=True, slots=True)
class CoolerStanding:
    """What is known of one cooler. Tuples keep every fact, oldest first.

    ``packed`` holds the latest packing of each bottle that is in it; a bottle put into another
    cooler since, or said to be elsewhere, is not. ``receipts`` are those in this cooler, or in
    none of a bottle that is in it. ``elsewhere`` names its bottles that arrived in another cooler,
    ``strayed`` those of another that arrived in this one, ``filled`` its bottles that hold water
    by the record.
    """

    cooler: str
    packed: tuple[Recorded, ...] = ()
    sealings: tuple[Recorded, ...] = ()
    reopenings: tuple[Recorded, ...] = ()
    offers: tuple[Recorded, ...] = ()
    statements: tuple[Recorded, ...] = ()
    openings: tuple[Recorded, ...] = ()
    receipts: tuple[Recorded, ...] = ()
    stated: tuple[Recorded, ...] = ()
    filled: frozenset[str] = frozenset()
    elsewhere: frozenset[str] = frozenset()
    strayed: frozenset[str] = frozenset()

    @property
    def bottles(self) -> tuple[str, ...]:
        """The codes in it, sorted."""
        return tuple(sorted(_code(one) for one in self.packed))

    @property
    def sealing(self) -> Recorded | None:
        """The sealing that stands: the last, unless the cooler was opened on the way since."""
        moves = in_order((*self.sealings, *self.reopenings))
        return moves[-1] if moves and isinstance(moves[-1].fact, CoolerSealed) else None

    @property
    def seals(self) -> tuple[str, ...]:
        """The numbers on it, none while it stands open."""
        return _sealed(self.sealing).seals if self.sealing else ()

    @property
    def broken(self) -> tuple[str, ...]:
        """The numbers that were broken on the way, oldest first."""
        return tuple(n for one in self.reopenings for n in getattr(one.fact, "broken", ()))

    @property
    def offer(self) -> Recorded | None:
        """The relinquishing that stands: the last, unless the cooler was opened again since."""
        moves = in_order((*self.offers, *self.reopenings))
        return moves[-1] if moves and isinstance(moves[-1].fact, HandoverOffered) else None

    @property
    def opening(self) -> Recorded | None:
        """The laboratory's opening; of several the latest stands."""
        return self.openings[-1] if self.openings else None

    @property
    def out(self) -> frozenset[str]:
        """The codes that came out of it, packed into it or not."""
        named = {code for one in self.stated for code in getattr(one.fact, "numbers", ())}
        return frozenset(_code(one) for one in self.receipts) | named

    @property
    def missing(self) -> tuple[str, ...]:
        """The codes packed into it that arrived nowhere."""
        arrived = self.out | self.elsewhere
        return tuple(code for code in self.bottles if code not in arrived)

    @property
    def state(self) -> str:
        """``packing``, ``sealed``, ``reopened``, ``relinquished`` or ``received``."""
        if self.openings or self.stated:
            return "received"
        if self.offer:
            return "relinquished"
        if self.sealing:
            return "sealed"
        return "reopened" if self.reopenings else "packing"

    @property
    def held_since(self) -> datetime | None:
        """Since when its present holder has it; None of one without a bottle."""
        if self.stated or self.opening:
            return max(one.done_at for one in (*self.stated, *self.openings))
        if self.offer:
            return self.offer.done_at
        return min((one.done_at for one in self.packed), default=None)

    @property
    def scanned_empty(self) -> bool:
        """As many bottles came out of it as the laboratory counted in it."""
        return self.opening is not None and len(self.out) >= _opened(self.opening).count

    @property
    def emptied_at(self) -> datetime | None:
        """From when on a bottle that did not come out of it is known to be missing.

        At the last bottle that was counted, else ``UNPACKED_WITHIN`` after the opening; of a
        receipt on paper, when it was stated.
        """
        known = [one.done_at for one in self.stated]
        if self.opening is not None:
            scans = [one.done_at for one in self.receipts]
            at = self.opening.done_at
            known.append(max([at, *scans]) if self.scanned_empty else at + UNPACKED_WITHIN)
        return min(known, default=None)


@dataclass(frozen=True, slots=True)
class Load:
    """A cooler as far as a bottle's absence depends on it: last sealed, and known to be empty."""

    sealed_at: datetime | None = None
    emptied_at: datetime | None = None


@dataclass(frozen=True, slots=True)
class Gap:
    """A stretch in which nobody's hands and no whole seal kept a cooler.

    ``why`` is ``seal-broken``, ``unsealed`` or ``not-relinquished``; ``sure`` where the record
    that could fill it is here already.
    """

    why: str
    since: datetime
    until: datetime
    evidence: tuple[Recorded, ...]
    sure: bool = True


def tell(cooler: str, recorded: Iterable[Recorded]) -> CoolerStanding:
    """Return the standing of that cooler from the living facts about it and about its bottles."""
    ordered = in_order({one.hash: one for one in recorded}.values())
    moved = {
        _code(one): one for one in ordered if isinstance(one.fact, BottlePacked | BottleLocated)
    }
    packed = {code: one for code, one in moved.items() if isinstance(one.fact, BottlePacked)}
    inside = {code: one for code, one in packed.items() if _named(one, "cooler") == cooler}
    mine = [one for one in ordered if _named(one, "cooler") == cooler]
    received = _of(ordered, BottleReceived)
    here = {_code(one) for one in received if _named(one, "cooler") == cooler}
    named = {_code(one) for one in received if _named(one, "cooler")}
    return CoolerStanding(
        cooler=cooler,
        packed=tuple(in_order(inside.values())),
        sealings=_of(mine, CoolerSealed),
        reopenings=_of(mine, CoolerReopened),
        offers=_of(mine, HandoverOffered),
        statements=_of(mine, HandoverStated),
        openings=_of(mine, CoolerOpened),
        receipts=tuple(
            one
            for one in received
            if _named(one, "cooler") == cooler
            or (_code(one) in inside and not _named(one, "cooler"))
        ),
        stated=_of(mine, ReceiptStated),
        filled=frozenset(_code(one) for one in _of(ordered, BottleFilled)) & set(inside),
        elsewhere=frozenset((named & set(inside)) - here),
        strayed=frozenset((here & set(packed)) - set(inside)),
    )


def set_hash(bottles: Iterable[str]) -> str:
    """Return the SHA-256 over the sorted codes, a line each, as hex: what a handover is of."""
    return hashlib.sha256("\n".join(sorted(set(bottles))).encode()).hexdigest()


def new_cooler(choice: Callable[[str], str] = secrets.choice) -> str:
    """Return a new cooler's id, ``C-`` and six characters of the alphabet of the codes."""
    return "C-" + "".join(choice(ALPHABET) for _ in range(COOLER_RANDOM))


def plain_seal(number: str) -> str:
    """Return a seal's number as it is compared: letters and digits, no case."""
    return "".join(character for character in number.upper() if character.isalnum())


def same_seals(some: Iterable[str], others: Iterable[str]) -> bool:
    """Say whether two lists name the same seals, in whatever order and however spaced."""
    return {plain_seal(one) for one in some} == {plain_seal(one) for one in others}


def missing_at(filled_at: datetime, load: Load | None, of_route: Sequence[Load]) -> datetime | None:
    """Return from when on a bottle that has not arrived is known to be missing; None: not yet.

    A bottle in a cooler is missed when that cooler is empty. One in no cooler is missed when every
    cooler of its route is empty, provided that it was filled before the last of them was sealed:
    what was filled later may still be packed into another.
    """
    if load is not None:
        return load.emptied_at
    emptied = [one.emptied_at for one in of_route if one.emptied_at is not None]
    sealed = [one.sealed_at for one in of_route if one.sealed_at is not None]
    if not emptied or len(emptied) < len(of_route):
        return None
    return max(emptied) if sealed and filled_at <= max(sealed) else None


def gap_of(told: CoolerStanding) -> Gap | None:
    """Return the gap in the custody of a cooler that the laboratory opened, at most one.

    A seal that was not whole comes before one that was never put on, and that before a handover
    nobody recorded: one cause, one gap. Where the seals read are others than those put on, that
    is the finding, broken or not. Whoever opens a cooler that he packed himself had it in hand.
    """
    opening = told.opening
    if opening is None or not told.packed:
        return None
    until, sealing = opening.done_at, told.sealing
    if sealing is None:
        last = in_order((*told.packed, *told.reopenings))[-1]
        if last.by == opening.by:
            return None
        return Gap("unsealed", last.done_at, until, (last, opening), bool(told.offers))
    if not same_seals(_opened(opening).seal_read, told.seals):
        return None
    given = told.offer or sealing
    if not _opened(opening).whole:
        return Gap("seal-broken", given.done_at, until, (given, opening))
    if told.offer or told.statements or sealing.by == opening.by:
        return None
    return Gap("not-relinquished", sealing.done_at, until, (sealing, opening), sure=False)


def _sealed(entry: Recorded | None) -> CoolerSealed:
    assert entry is not None
    assert isinstance(entry.fact, CoolerSealed)
    return entry.fact


def _opened(entry: Recorded) -> CoolerOpened:
    assert isinstance(entry.fact, CoolerOpened)
    return entry.fact


def _of(ordered: Sequence[Recorded], kind: type[Fact]) -> tuple[Recorded, ...]:
    return tuple(one for one in ordered if isinstance(one.fact, kind))


def _named(entry: Recorded, name: str) -> str:
    return str(getattr(entry.fact, name, ""))


def _code(entry: Recorded) -> str:
    return _named(entry, "bottle")
