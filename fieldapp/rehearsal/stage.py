"""The demo as its page sees it: two nodes, the line between them, the time they all read."""

import threading
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path

from fieldapp.rehearsal import seen
from fieldapp.rehearsal.nodes import Process, Time
from fieldapp.rehearsal.relay import Relay

HALF_AN_HOUR = timedelta(minutes=30)
MIDDLE_BYTES = 2500
"""About where an exchange of a few entries is half over."""


@dataclass
class Stage:
    """What the page of the line shows and moves. The time only goes on, never back."""

    time: Time
    relay: Relay
    nodes: tuple[Process, Process]
    central: Path
    tablet: Path
    central_url: str
    tablet_url: str
    labels: Path
    _moving: threading.Lock = field(default_factory=threading.Lock)

    def later(self, length: timedelta = HALF_AN_HOUR) -> None:
        """Let that much time pass at once, everywhere."""
        with self._moving:
            self.time.until(self.time.now() + length)

    def to_the_ring(self) -> datetime | None:
        """Let time pass until the first wait on the tablet is over; nothing where none waits."""
        with self._moving:
            at = seen.next_ring(self.tablet)
            if at is not None:
                self.time.until(at)
            return at

    def cut_in_the_middle(self) -> None:
        """Let the line go down by itself in the middle of the next exchange."""
        self.relay.cut_after(MIDDLE_BYTES)
