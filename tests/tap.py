"""A node at which a sampler presses, and visits of every shape that the Kitchen's tests need."""

from collections.abc import Callable
from datetime import timedelta
from typing import Any

from fieldapp.commands import drawing, kitchen, last_use
from fieldapp.domain import codes
from fieldapp.domain.facts import (
    BottleIssued,
    Fact,
    PersonListed,
    ProtocolKept,
    SiteListed,
    VisitPlanned,
)
from fieldapp.domain.protocols import find
from fieldapp.domain.protocols.standing import Standing
from tests.counter import Node

VISIT, OTHER, PAIR, BLANK, HERE = "Q-0401", "Q-0402", "Q-0404", "Q-0405", "Q-0406"
SAMPLER = "sampler-1"


class Tap(Node):
    """A node at which a sampler presses; each press is one act."""

    def press(self, command: Callable[..., list[Fact]], visit: str, **given: Any) -> Any:
        return self.decide(lambda p, r: command(p, r, visit, **given), by=SAMPLER)

    def standing(self, visit: str) -> Standing:
        with self.pages() as pages:
            told = pages.standing(visit, self.clock.read())
        assert told is not None
        return told

    def kinds(self, visit: str) -> list[str]:
        """Return the kinds of what a sampler recorded of a visit, in order."""
        with self.pages() as pages:
            return [e.fact.kind for e in pages.recorded(visit) if e.fact.place == "kitchen"]

    def facts(self, visit: str, kind: str) -> list[Any]:
        with self.pages() as pages:
            return [e.fact for e in pages.recorded(visit) if e.fact.kind == kind]

    def begin(self, visit: str, *, hours: float = 8) -> None:
        """Open the visit and answer all it asks, water last used so many hours ago."""
        self.press(kitchen.open_visit, visit)
        self.press(kitchen.agree, visit, how="spoken")
        used = self.clock.at - timedelta(hours=hours)
        self.press(last_use.state_last_use, visit, exact="at", at=used, where="bath")
        while (due := self.standing(visit).due).kind == "ask":
            self.press(kitchen.answer, visit, question=due.question, answer=due.answers[0])

    def add(self, visit: str, protocol: str, *draws: dict[str, Any]) -> dict[int, str]:
        """Plan a visit with those draws and issue their bottles; returns the codes."""
        text = find(protocol)
        issued = {draw["draw"]: codes.new_code() for draw in draws}
        self.record(
            ProtocolKept(protocol=text.id, sha256=text.sha256, toml=text.toml),
            SiteListed(
                site=visit, round="spring", route="north", tap="kitchen", tier="1", line="lead"
            ),
            VisitPlanned(
                visit=visit, round="spring", route="north", site=visit, tap="kitchen",
                protocol=text.id, sha256=text.sha256, draws=draws, position=9,
            ),
            *(
                BottleIssued(
                    bottle=code, round="spring", route="north", visit=visit, draw=draw,
                    kind_="sequential", purpose="compliance", volume_ml=1000,
                )
                for draw, code in issued.items()
            ),
        )  # fmt: skip
        return issued

    def thirty(self) -> dict[int, str]:
        """Plan a visit of two litres after a stand of thirty minutes; returns the codes."""
        draws = [{"draw": draw, "purpose": "investigation"} for draw in (1, 2)]
        return self.add(HERE, "thirty-minute", *draws)

    def until(self, visit: str, *kinds: str) -> None:
        """Open the visit and answer what it asks until one of those acts is due."""
        while (due := self.standing(visit).due).kind not in kinds:
            if due.kind == "open":
                self.press(kitchen.open_visit, visit)
            elif due.question == "consent":
                self.press(kitchen.agree, visit, how="spoken")
            elif due.kind == "ask":
                self.press(kitchen.answer, visit, question=due.question, answer=due.answers[0])
            else:
                raise AssertionError(f"{due.kind} is due, not one of {kinds}")

    def spare(self) -> str:
        code = codes.new_code()
        self.record(BottleIssued(bottle=code, round="spring", route="north"))
        return code

    def name_sampler(self) -> None:
        """List the sampler, so that a browser can choose the name."""
        self.record(PersonListed(person=SAMPLER, roles=("sampler",), name="Imaginary Sampler"))

    def finish(self, visit: str) -> None:
        """Draw the one bottle of a visit that was begun, sign and close."""
        self.press(drawing.set_bottle, visit, code=self.codes[visit])
        self.press(drawing.fill, visit, fills={})
        self.press(kitchen.sign, visit, name="Imaginary Sampler", close=True)
