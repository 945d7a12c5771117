"""How long to wait before the next try, so that a dead line costs little and a herd spreads."""

from collections.abc import Callable

SHORTEST_S = 5.0
LONGEST_S = 15 * 60.0


def delay(failures: int, rnd: Callable[[], float]) -> float:
    """Return seconds to wait after so many failures in a row: 5 s to 15 min, spread by chance.

    ``rnd`` returns a number from 0 to 1.
    """
    doublings = min(max(failures, 1), 16)
    ceiling = min(LONGEST_S, SHORTEST_S * 2.0**doublings)
    return SHORTEST_S + (ceiling - SHORTEST_S) * rnd()
