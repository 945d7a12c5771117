"""One bottle's standing, told from the facts about it; any order of arrival gives the same."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import datetime

from fieldapp.domain.facts import (
    AnalysisDecided,
    BottleFilled,
    BottleIssued,
    BottleLocated,
    BottlePacked,
    BottleReceived,
    BottleSet,
    BottleVoided,
    Fact,
    LabelsPrinted,
    ReceiptStated,
    ResultReported,
)
from fieldapp.domain.recorded import Recorded


@dataclass(frozen=True, slots=True)
class BottleStanding:
    """What is known of one bottle. Lists keep every contradicting fact, oldest first."""

    bottle: str
    issued: tuple[Recorded, ...] = ()
    printed: int = 0
    voided: Recorded | None = None
    sets: tuple[Recorded, ...] = ()
    fillings: tuple[Recorded, ...] = ()
    packings: tuple[Recorded, ...] = ()
    located: tuple[Recorded, ...] = ()
    receipts: tuple[Recorded, ...] = ()
    stated: tuple[Recorded, ...] = ()
    decisions: tuple[Recorded, ...] = ()
    results: dict[str, tuple[Recorded, ...]] = field(default_factory=dict)

    @property
    def plan(self) -> BottleIssued | None:
        """The issue that binds the code: the first one recorded."""
        found = self.issued[0].fact if self.issued else None
        return found if isinstance(found, BottleIssued) else None

    @property
    def binding(self) -> BottleSet | None:
        """The latest scan that stood the bottle in an order; it binds a spare (R15)."""
        found = self.sets[-1].fact if self.sets else None
        return found if isinstance(found, BottleSet) else None

    @property
    def visit(self) -> str:
        """The visit that filled it, else the one it was set at, else the one printed for."""
        if self.fillings:
            return _named(self.fillings[-1].fact, "visit")
        if self.binding:
            return self.binding.visit
        return self.plan.visit if self.plan else ""

    @property
    def draw(self) -> int:
        """The draw it holds, or is meant for."""
        if self.fillings and isinstance(self.fillings[-1].fact, BottleFilled):
            return self.fillings[-1].fact.draw
        if self.binding:
            return self.binding.draw
        return self.plan.draw if self.plan else 0

    @property
    def moved(self) -> bool:
        """Printed for one draw and set or filled in the place of another (R26)."""
        if not (self.plan and self.plan.draw):
            return False
        return (self.plan.visit, self.plan.draw) != (self.visit, self.draw)

    @property
    def purpose(self) -> str:
        """Why it is drawn: as bound when it was set, else as issued; fixed before the draw (R5)."""
        if self.binding and self.binding.purpose:
            return self.binding.purpose
        return self.plan.purpose if self.plan else ""

    @property
    def kind(self) -> str:
        """First-draw, sequential, blank … as bound when it was set, else as issued."""
        if self.binding and self.binding.kind_:
            return self.binding.kind_
        return self.plan.kind_ if self.plan else ""

    @property
    def spare(self) -> bool:
        """Issued without a draw (R15)."""
        return self.plan is not None and not self.plan.draw

    @property
    def filled_at(self) -> datetime | None:
        """When it was filled, by the latest filling."""
        return self.fillings[-1].done_at if self.fillings else None

    @property
    def cooler(self) -> str:
        """The cooler it was last packed into, empty for none or once it is said to be elsewhere."""
        return _named(self._carried, "cooler") if self._carried else ""

    @property
    def whereabouts(self) -> str:
        """Where somebody says that it is, if nobody packed it since; a kind, else empty."""
        return _named(self._carried, "how") if self._carried else ""

    @property
    def _carried(self) -> Fact | None:
        """The last packing or word of where it is."""
        moves = in_order((*self.packings, *self.located))
        return moves[-1].fact if moves else None

    @property
    def arrived(self) -> bool:
        """The laboratory has it, by its own record or by a statement at the Desk (R12)."""
        return bool(self.receipts or self.stated)

    @property
    def numbers(self) -> tuple[str, ...]:
        """The laboratory's numbers it was received under, each once, the latest last."""
        given = [_named(one.fact, "laboratory_number") for one in self.receipts]
        said = [str(getattr(one.fact, "numbers", {}).get(self.bottle, "")) for one in self.stated]
        return tuple(dict.fromkeys(number for number in (*said, *given) if number))

    @property
    def receipt(self) -> BottleReceived | None:
        """The laboratory's latest act on it."""
        found = self.receipts[-1].fact if self.receipts else None
        return found if isinstance(found, BottleReceived) else None

    @property
    def decision(self) -> AnalysisDecided | None:
        """The latest decision on a held bottle."""
        found = self.decisions[-1].fact if self.decisions else None
        return found if isinstance(found, AnalysisDecided) else None


def tell(bottle: str, recorded: Iterable[Recorded]) -> BottleStanding:
    """Return the standing of that bottle from the living facts about it."""
    ordered = in_order(recorded)
    results: dict[str, list[Recorded]] = {}
    for entry in ordered:
        if isinstance(entry.fact, ResultReported):
            results.setdefault(entry.fact.analyte, []).append(entry)
    voids = _of(ordered, BottleVoided)
    return BottleStanding(
        bottle=bottle,
        issued=_of(ordered, BottleIssued),
        printed=len(_of(ordered, LabelsPrinted)),
        voided=voids[-1] if voids else None,
        sets=_of(ordered, BottleSet),
        fillings=_of(ordered, BottleFilled),
        packings=_of(ordered, BottlePacked),
        located=_of(ordered, BottleLocated),
        receipts=_of(ordered, BottleReceived),
        stated=_of(ordered, ReceiptStated),
        decisions=_of(ordered, AnalysisDecided),
        results={analyte: tuple(found) for analyte, found in results.items()},
    )


def in_order(recorded: Iterable[Recorded]) -> list[Recorded]:
    """Return entries by the time they were recorded; within a log by seq whatever its clock said.

    Order inside a log is its seq; between logs the clock is only what a page shows (design 2).
    """
    by_log: dict[str, list[Recorded]] = {}
    for entry in recorded:
        by_log.setdefault(entry.log, []).append(entry)
    keyed: list[tuple[datetime, str, int, Recorded]] = []
    for log, entries in by_log.items():
        latest = None
        for entry in sorted(entries, key=lambda one: one.seq):
            latest = entry.at if latest is None else max(latest, entry.at)
            keyed.append((latest, log, entry.seq, entry))
    return [entry for *_, entry in sorted(keyed, key=lambda key: key[:3])]


def _of(ordered: Sequence[Recorded], kind: type[Fact]) -> tuple[Recorded, ...]:
    return tuple(entry for entry in ordered if isinstance(entry.fact, kind))


def _named(given: Fact, name: str) -> str:
    return str(getattr(given, name, ""))
