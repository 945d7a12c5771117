"""Send and fetch: one run of exchanges with central."""

import json
from collections.abc import Callable
from typing import Any

from fieldapp.store import Store
from sync import exchange
from sync.errors import Refused


def send_and_fetch(
    store: Store,
    *,
    progress: Callable[[int, int], None] | None = None,
    photos: Callable[[int, int], None] | None = None,
) -> dict[str, Any]:
    """Exchange with central until nothing is left either way, then send photos.

    ``progress`` counts entries, ``photos`` bytes.

    Returns:
        ``pushed``, ``pulled``, ``waiting``, ``refused``, ``regressed``, ``carried``,
        ``photos`` (sent), ``photos_waiting``, ``photos_say`` (what stopped them, or empty).

    Raises:
        Refused: this device is not enrolled anywhere.
        NoContact: nothing trustworthy answered; everything waits.
    """
    from sync.http import HttpPeer  # brings requests, which a start need not pay for

    pin = store.central()
    if pin is None:
        raise Refused("not-enrolled", "This device is enrolled nowhere. Run 'tapwitness enrol'.")
    with store.sending:
        peer = HttpPeer(pin.url, store.realm)
        try:
            report = exchange.run(store.replica(), peer, progress=progress, photos=photos)
        finally:
            peer.close()
        with store.transaction():
            store.put("contact", json.dumps({"at": report.at or store.moment().at}))
    return {
        "pushed": report.pushed, "pulled": report.pulled, "waiting": report.waiting,
        "refused": [str(one["says"]) for one in report.refused], "regressed": report.regressed,
        "carried": report.carried, "photos": report.photos_sent,
        "photos_waiting": report.photos_waiting, "photos_say": report.photos_say,
    }  # fmt: skip


def sync_now(store: Store, *, progress: Callable[..., None]) -> dict[str, Any]:
    """Send and fetch for a command, with its progress."""
    return send_and_fetch(
        store,
        progress=lambda done, of: progress("sync", done, of),
        photos=lambda done, of: progress("photos, bytes", done, of),
    )
