"""Facts of custody as a tablet and a counter record them, in the order they are given."""

import hashlib
from datetime import UTC, datetime, timedelta

from fieldapp.domain.custody import CoolerStanding, tell
from fieldapp.domain.facts import (
    BottleFilled,
    BottlePacked,
    BottleReceived,
    CoolerOpened,
    CoolerReopened,
    CoolerSealed,
    Fact,
    HandoverOffered,
)
from fieldapp.domain.recorded import Recorded

MORNING = datetime(2027, 5, 4, 12, 0, tzinfo=UTC)
COOLER, OTHER = "C-000001", "C-000002"
ONE, TWO, THREE, FOUR = "0000000000A", "0000000000B", "0000000000C", "0000000000D"


class Record:
    """A record that grows by a minute with each fact, at a tablet or at central."""

    def __init__(self) -> None:
        self.entries: list[Recorded] = []
        self.at = MORNING

    def add(self, *facts: Fact, log: str = "tablet", by: str = "", minutes: int = 1) -> Recorded:
        """Record facts so many minutes after the last; returns the last entry."""
        for fact in facts:
            self.at += timedelta(minutes=minutes)
            seq = len(self.entries) + 1
            self.entries.append(
                Recorded(
                    fact=fact, hash=hashlib.sha256(f"{log}{seq}".encode()).hexdigest(), log=log,
                    seq=seq, at=self.at, off=-360, mono=seq * 60_000, boot="b",
                    by=by or ("sampler-1" if log == "tablet" else "clerk-1"),
                )
            )  # fmt: skip
        return self.entries[-1]

    def fill(self, *codes: str) -> None:
        for code in codes:
            self.add(BottleFilled(visit="V-1", bottle=code, draw=1, fill="line"))

    def pack(self, *codes: str, cooler: str = COOLER) -> None:
        for code in codes:
            self.add(BottlePacked(bottle=code, cooler=cooler, route="north", box="3"))

    def seal(self, *seals: str, count: int = 2, cooler: str = COOLER) -> None:
        self.add(CoolerSealed(cooler=cooler, route="north", box="3", seals=seals, count=count))

    def reopen(self, *broken: str) -> None:
        self.add(CoolerReopened(cooler=COOLER, route="north", broken=broken, reason="one more"))

    def offer(self, *seals: str) -> None:
        self.add(HandoverOffered(cooler=COOLER, route="north", seals=seals, count=2, set=""))

    def open(
        self, *read: str, count: int = 2, whole: bool = True, by: str = "", cooler: str = COOLER
    ) -> None:
        opened = CoolerOpened(cooler=cooler, seal_read=read, whole=whole, count=count)
        self.add(opened, log="central", by=by, minutes=60)

    def receive(self, *codes: str, cooler: str = COOLER) -> None:
        for code in codes:
            received = BottleReceived(bottle=code, outcome="accepted", cooler=cooler)
            self.add(received, log="central")

    def told(self, cooler: str = COOLER) -> CoolerStanding:
        return tell(cooler, self.entries)


def ordinary(record: Record, *, count: int = 2, read: str = "88 214", whole: bool = True) -> None:
    """Two bottles filled, packed, sealed, handed over and opened at the laboratory."""
    record.fill(ONE, TWO)
    record.pack(ONE, TWO)
    record.seal("88 214")
    record.offer("88 214")
    record.open(*filter(None, [read]), count=count, whole=whole)
