"""A small round on a real node under a scripted hand: what Bench and Desk tests start from."""

from collections.abc import Callable, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from fieldapp import identity
from fieldapp.domain import codes
from fieldapp.domain.custody import set_hash
from fieldapp.domain.facts import (
    BottleFilled,
    BottleIssued,
    BottlePacked,
    BottleReceived,
    BottleSet,
    CoolerOpened,
    CoolerSealed,
    DeviationStated,
    Fact,
    HandoverOffered,
    OccupantAgreed,
    PersonListed,
    ProtocolKept,
    QuestionAnswered,
    ResultReported,
    RoundOpened,
    RoutePlanned,
    SiteListed,
    VisitClosed,
    VisitOpened,
    VisitPlanned,
    VisitSigned,
    WaterUsed,
)
from fieldapp.domain.protocols import find
from fieldapp.domain.protocols.steps import Ask
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections.pages import Pages
from fieldapp.store import Store

MORNING = datetime(2027, 5, 4, 12, 0, tzinfo=UTC)
"""Six in the morning of the round's day by the clocks of its zone."""


@dataclass
class HandClock:
    """A clock that a test moves; it ticks a second at each reading, so entries have an order."""

    at: datetime = MORNING
    scripted: bool = field(default=False)

    def read(self) -> Reading:
        self.at += timedelta(seconds=1)
        return Reading(self.at, -360, int(self.at.timestamp() * 1000), "boot")

    def pass_by(self, **length: float) -> None:
        self.at += timedelta(**length)


class Node:
    """One node with a round of first-litre visits, written by facts alone."""

    def __init__(self, folder: Path) -> None:
        self.clock = HandClock()
        self.store = Store.open(folder, self.clock)
        self.codes: dict[str, str] = {}

    def record(self, *facts: Fact, by: str = "clerk-1") -> tuple[str, ...]:
        """Record facts as one act; returns the entries' hashes."""
        return self.decide(lambda _pages, _reading: list(facts), by=by)

    def decide(self, decide: Callable[[Pages, Reading], Any], by: str = "clerk-1") -> Any:
        """Record what a command decides."""
        return self.store.act(identity.new_act(), {}, decide, by=by).entries

    @contextmanager
    def pages(self) -> Any:
        with self.store.pages() as pages:
            yield pages

    def bottle(self, visit: str) -> Any:
        """Return the row of the bottle printed for that visit."""
        with self.pages() as pages:
            return pages.bottle(self.codes[visit])

    def plan(self, visits: Sequence[str], *, purpose: str = "compliance") -> None:
        """Open the round, one first-litre bottle a visit; a visit is named after its site."""
        protocol = find("first-litre")
        self.record(
            ProtocolKept(protocol=protocol.id, sha256=protocol.sha256, toml=protocol.toml),
            PersonListed(person="clerk-1", roles=("clerk",), name="Imaginary Clerk"),
            RoundOpened(
                round="spring", title="Spring round", rule="us-2020", convention="interpolate",
                zone="America/Boise", from_="2027-05-01", to="2027-05-31", months=(5,),
                laboratory="bench-lab", laboratory_title="Invented Laboratory", due="P1D",
                protocols={protocol.id: protocol.sha256},
            ),
            RoutePlanned(
                route="north", round="spring", title="North", day="2027-05-04", sampler="sampler-1"
            ),
        )  # fmt: skip
        for place, visit in enumerate(visits, start=1):
            self.add_visit(visit, place, purpose=purpose)

    def add_visit(self, visit: str, place: int, *, purpose: str = "compliance") -> None:
        """Plan one more visit and issue its bottle."""
        protocol = find("first-litre")
        self.codes[visit] = codes.new_code()
        self.record(
            SiteListed(
                site=visit, round="spring", route="north", tap="kitchen", tier="1", line="copper"
            ),
            VisitPlanned(
                visit=visit, round="spring", route="north", site=visit, tap="kitchen",
                protocol=protocol.id, sha256=protocol.sha256,
                draws=({"draw": 1, "purpose": purpose},), position=place,
            ),
            BottleIssued(
                bottle=self.codes[visit], round="spring", route="north", visit=visit, draw=1,
                kind_="first-draw", purpose=purpose, volume_ml=1000, analyse=("lead", "copper"),
            ),
        )  # fmt: skip

    def fill(self, visit: str) -> None:
        """Do all that the protocol asks at that visit, as expected, and close it."""
        code, drawn_at = self.codes[visit], self.clock.at
        used = format_utc(drawn_at - timedelta(hours=8))
        asked = [step for step in find("first-litre").steps if isinstance(step, Ask)]
        answers = [
            QuestionAnswered(visit=visit, question=step.question, answer=step.answers[0])
            for step in asked
            if step.answers and step.question != "consent"
        ]
        self.record(
            VisitOpened(visit=visit),
            OccupantAgreed(visit=visit, how="spoken", name="Imaginary Resident"),
            WaterUsed(visit=visit, from_=used, to=used, exact="at", where="bath"),
            *answers,
            BottleSet(visit=visit, bottle=code, draw=1, kind_="first-draw", purpose=""),
            BottleFilled(visit=visit, bottle=code, draw=1, fill="line"),
            VisitSigned(visit=visit, who="sampler", how="typed", name="Imaginary Sampler"),
            VisitClosed(visit=visit, outcome="done"),
            by="sampler-1",
        )

    def pack(
        self, cooler: str, box: str, visits: Sequence[str], *, seals: Sequence[str] = ()
    ) -> None:
        """Pack the bottles of those visits into a cooler, seal and relinquish it."""
        for visit in visits:
            self.record(
                BottlePacked(bottle=self.codes[visit], cooler=cooler, route="north", box=box),
                by="sampler-1",
            )
        if not seals:
            return
        count = len(visits)
        held = {"cooler": cooler, "route": "north", "seals": tuple(seals), "count": count}
        self.record(CoolerSealed(**held, box=box), by="sampler-1")
        codes_in = [self.codes[visit] for visit in visits]
        self.record(HandoverOffered(**held, set=set_hash(codes_in)), by="sampler-1")

    def open(self, cooler: str, count: int, *seals: str, whole: bool = True) -> None:
        """Open a cooler at the counter, as seen."""
        self.record(
            CoolerOpened(
                cooler=cooler, seal_read=seals, whole=whole, count=count, laboratory="bench-lab"
            )
        )

    def deviate(self, visit: str) -> None:
        """State that the tap was flushed before the stand."""
        self.record(
            DeviationStated(visit=visit, step="stand", deviation="pre-flush"), by="sampler-1"
        )

    def accept(self, visit: str, number: str = "") -> None:
        """Receive the bottle as it should be."""
        self.record(
            BottleReceived(
                bottle=self.codes[visit], outcome="accepted", laboratory="bench-lab",
                laboratory_number=number,
            )
        )  # fmt: skip

    def report(self, visit: str, lead: str, copper: str = "100") -> None:
        """Report lead and copper of that bottle in µg/L; ``<2`` is less than 2."""
        for analyte, written in (("lead", lead), ("copper", copper)):
            self.record(
                ResultReported(
                    bottle=self.codes[visit], analyte=analyte, value=written.lstrip("<"),
                    unit="ug/L", qualifier="<" if written.startswith("<") else "",
                )
            )  # fmt: skip
