"""What a command line asks of a node, whether it runs here or holds the folder elsewhere.

Each piece of work takes plain values and gives plain values, so that a running node can do it for
a command over loopback (design 7). ``WORK`` is the registry.
"""

from collections.abc import Callable, Mapping
from typing import Any

from fieldapp.store import Store
from fieldapp.work.custody import print_custody
from fieldapp.work.devices import enrol, invite
from fieldapp.work.labels import print_labels
from fieldapp.work.results import import_results
from fieldapp.work.rounds import import_round
from fieldapp.work.sending import send_and_fetch as send_and_fetch
from fieldapp.work.sending import sync_now

Progress = Callable[[str, int, int], None]
"""Told what is being done, how many are done, of how many (0: not known)."""

WORK: dict[str, Callable[..., dict[str, Any]]] = {
    "round-import": import_round,
    "results-import": import_results,
    "labels": print_labels,
    "custody": print_custody,
    "invite": invite,
    "enrol": enrol,
    "sync": sync_now,
}


def do(store: Store, name: str, asked: Mapping[str, Any], progress: Progress) -> dict[str, Any]:
    """Do that piece of work at the store and return its answer.

    Raises:
        RuleBroken, SyncError, CannotPrint: in words; nothing half-done.
    """
    return WORK[name](store, progress=progress, **asked)


def quiet(_what: str, _done: int, _of: int) -> None:
    """Show no progress."""
