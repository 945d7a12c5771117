"""Invite, enrol: how a device becomes known to a central."""

import hashlib
import secrets
from collections.abc import Callable, Mapping
from datetime import datetime, timedelta
from typing import Any

from fieldapp import identity
from fieldapp.commands.devices import enrol_device, places_of
from fieldapp.domain.codes import ALPHABET
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.pages import Pages
from fieldapp.store import Store
from sync.encoding import b64, unb64
from sync.errors import Refused
from sync.exchange import enrol as enrol_at

CODE_LENGTH = 14
"""Crockford characters: 70 bits, one use, ten minutes (sync.md B7 asks for 64 at least)."""
VALID_FOR = timedelta(minutes=10)
OTHER_CLOCK = "A rehearsal's device and a real central do not mix. Use a central of the same kind."


def invite(store: Store, *, person: str, progress: Callable[..., None]) -> dict[str, Any]:
    """Mint a one-time code with which a device of that person is enrolled.

    Returns:
        ``code``, ``person``, ``places``, ``until`` (UTC text).
    """
    with store.pages() as pages:
        places = places_of(pages, person)
    code = "".join(secrets.choice(ALPHABET) for _ in range(CODE_LENGTH))
    until = store.clock.read().at + VALID_FOR
    with store.transaction() as db:
        db.execute(
            "INSERT INTO invite (code_hash, person, places, expires_at) VALUES (?, ?, ?, ?)",
            (_hashed(code), person, " ".join(places), text(until)),
        )
    progress("invite", 1, 1)
    shown = "-".join(code[i : i + 7] for i in range(0, CODE_LENGTH, 7))
    return {"code": shown, "person": person, "places": list(places), "until": text(until)}


def take_invite(store: Store, dev: str, public_key: bytes, code: str) -> Mapping[str, Any]:
    """Enrol a device by a code, once; what it must know of this central is the answer.

    Raises:
        Refused: unknown, used, or too old a code.
    """
    if identity.is_rehearsal(dev) != store.identity.scripted:
        raise Refused("other-clock", OTHER_CLOCK)
    now = store.clock.read().at
    with store.reader() as db:
        row = db.execute(
            "SELECT person, places, expires_at, used_by FROM invite WHERE code_hash = ?",
            (_hashed(code),),
        ).fetchone()
    if row is None:
        raise Refused("no-such-code", "No such code. Ask the coordinator for a new one.")
    person, places, expires_at, used_by = row
    if used_by and used_by != dev:
        raise Refused("code-used", "That code was used already. Ask the coordinator for a new one.")
    if not used_by and datetime.fromisoformat(expires_at) < now:
        raise Refused("code-old", "That code is too old. Ask the coordinator for a new one.")
    key = b64(public_key)
    store.act(
        identity.new_act(),
        {"enrol": dev, "key": key},
        lambda pages, _reading: _enrolment(store, pages, dev, key, person, places, code),
        by="",
    )
    return {
        "dev": store.dev,
        "public_key": b64(store.key.public),
        "person": person,
        "places": places.split(),
    }


def _enrolment(
    store: Store, pages: Pages, dev: str, key: str, person: str, places: str, code: str
) -> list[Any]:
    store.mark_invite(_hashed(code), dev)
    known = pages.row("SELECT 1 FROM p_device WHERE dev = ? AND public_key = ?", (dev, key))
    if known is not None:
        return []
    return enrol_device(pages, dev=dev, public_key=key, person=person, places=places.split())


def enrol(store: Store, *, url: str, code: str, progress: Callable[..., None]) -> dict[str, Any]:
    """Enrol this device at a central and pin its key.

    Returns:
        ``central``, ``person``, ``places``.
    """
    from sync.http import HttpPeer  # brings requests, which a start need not pay for

    peer = HttpPeer(url, store.realm)
    try:
        answer = enrol_at(peer, store.realm, store.key, store.dev, _plain(code))
    finally:
        peer.close()
    unb64(str(answer["public_key"]))  # a torn answer shows here, before anything is kept
    identity.pin_central(store.folder, {
        "url": url.rstrip("/"), "dev": answer["dev"], "public_key": answer["public_key"],
    })  # fmt: skip
    with store.transaction():
        store.put("places", " ".join(answer["places"]))
        store.put("person", str(answer["person"]))
    progress("enrolled", 1, 1)
    return {"central": answer["dev"], "person": answer["person"], "places": answer["places"]}


def _hashed(code: str) -> str:
    return hashlib.sha256(_plain(code).encode()).hexdigest()


def _plain(code: str) -> str:
    plain = "".join(code.upper().split()).replace("-", "")
    return plain.replace("O", "0").replace("I", "1").replace("L", "1")
