"""Send and fetch: one run of exchanges with central."""

import json
from collections.abc import Callable
from typing import Any

from fieldapp.store import Store
from sync import exchange
from sync.errors import Refused
from sync.http import HttpPeer

Progress = Callable[[int, int], None]


def send_and_fetch(store: Store, *, progress: Progress | None = None) -> dict[str, Any]:
    """Exchange with central until nothing is left either way.

    Returns:
        ``pushed``, ``pulled``, ``waiting``, ``refused``, ``regressed``, ``carried``.

    Raises:
        Refused: this device is not enrolled anywhere.
        NoContact: nothing trustworthy answered; everything waits.
    """
    pin = store.central()
    if pin is None:
        raise Refused("not-enrolled", "This device is enrolled nowhere. Run 'tapwitness enrol'.")
    with store.sending:
        peer = HttpPeer(pin.url, store.realm)
        try:
            reports = _runs(store, peer, progress)
        finally:
            peer.close()
        with store.transaction():
            store.put("contact", json.dumps({"at": reports[-1].at or store.moment().at}))
    last = reports[-1]
    return {
        "pushed": sum(one.pushed for one in reports), "pulled": sum(one.pulled for one in reports),
        "waiting": last.waiting, "refused": [str(one["says"]) for one in last.refused],
        "regressed": sum(one.regressed for one in reports),
        "carried": sum(one.carried for one in reports),
    }  # fmt: skip


def _runs(store: Store, peer: HttpPeer, progress: Progress | None) -> list[exchange.SyncReport]:
    """Exchange once more where an entry came before the enrolment of its author.

    Logs arrive in no order that means anything, so what a run fetched may vouch for what it held
    back. A run that fetched nothing settles it.
    """
    reports = [exchange.run(store.replica(), peer, progress=progress)]
    while reports[-1].pulled and any(one["why"] == "unverified" for one in reports[-1].refused):
        reports.append(exchange.run(store.replica(), peer, progress=progress))
    return reports


def sync_now(store: Store, *, progress: Callable[..., None]) -> dict[str, Any]:
    """Send and fetch for a command, with its progress."""
    return send_and_fetch(store, progress=lambda done, of: progress("sync", done, of))
