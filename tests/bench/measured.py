"""One line of the table, and how long a deed takes."""

import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Measured:
    """One line of the table; times in milliseconds, ``limit`` on the ratio."""

    name: str
    ours_ms: float
    peer_ms: float
    limit: float

    @property
    def ratio(self) -> float:
        """How many times as long as the peer."""
        return self.ours_ms / self.peer_ms


def timed(deed: Callable[[], object]) -> float:
    """Return how long the deed took, in milliseconds."""
    began = time.perf_counter()
    deed()
    return (time.perf_counter() - began) * 1000
