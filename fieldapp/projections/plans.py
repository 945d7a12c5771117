"""The rows of the plan: rounds, protocols, people, devices, routes, sites."""

import base64
import hashlib
import json
import sqlite3

from fieldapp.domain.bottles import in_order
from fieldapp.domain.facts import (
    DeviceEnrolled,
    DeviceGranted,
    PersonListed,
    ProtocolKept,
    RoundOpened,
    RoutePlanned,
    SiteDropped,
    SiteListed,
)
from fieldapp.domain.protocols import BadProtocol, Protocol, read_protocol
from fieldapp.projections.facts import about
from fieldapp.projections.tables import put

_protocols: dict[str, Protocol] = {}


def tell_round(db: sqlite3.Connection, round_id: str) -> None:
    """Write the round's row from the latest opening or change."""
    entries = about(db, f"round:{round_id}", ("round.opened", "round.changed"))
    if not entries or not isinstance(given := in_order(entries)[-1].fact, RoundOpened):
        db.execute("DELETE FROM p_round WHERE round = ?", (round_id,))
        return
    put(db, "p_round", {
        "round": given.round, "title": given.title, "rule": given.rule,
        "convention": given.convention, "convention_by": given.convention_by, "zone": given.zone,
        "from_day": given.from_, "to_day": given.to, "months": json.dumps(given.months),
        "laboratory": given.laboratory, "laboratory_title": given.laboratory_title,
        "due": given.due, "keep_poured": int(given.keep_poured),
        "protocols": json.dumps(dict(given.protocols)),
    })  # fmt: skip


def tell_protocol(db: sqlite3.Connection, protocol: str) -> None:
    """Write a row for each kept text of that protocol."""
    for entry in about(db, f"protocol:{protocol}", ("protocol.kept",)):
        given = entry.fact
        assert isinstance(given, ProtocolKept)
        put(db, "p_protocol", {
            "sha256": given.sha256, "protocol": given.protocol, "toml": given.toml,
        })  # fmt: skip


def tell_person(db: sqlite3.Connection, person: str) -> None:
    """Write the person's row; the name stays in the private part."""
    entries = in_order(about(db, f"person:{person}", ("person.listed",)))
    db.execute("DELETE FROM p_person WHERE person = ?", (person,))
    if entries and isinstance(given := entries[-1].fact, PersonListed):
        put(db, "p_person", {
            "person": person, "roles": json.dumps(given.roles), "hash": entries[-1].hash,
            "priv": _priv(db, entries[-1].hash),
        })  # fmt: skip


def tell_device(db: sqlite3.Connection, dev: str) -> None:
    """Write the device's keys and grants."""
    db.execute("DELETE FROM p_device WHERE dev = ?", (dev,))
    db.execute("DELETE FROM p_grant WHERE dev = ?", (dev,))
    for entry in about(db, f"dev:{dev}", ("device.enrolled", "device.granted")):
        given = entry.fact
        if isinstance(given, DeviceEnrolled):
            put(db, "p_device", {
                "dev": dev, "key": key_name(given.public_key), "public_key": given.public_key,
                "places": json.dumps(given.places), "person": given.person,
                "laboratory": given.laboratory,
            })  # fmt: skip
        if isinstance(given, DeviceGranted):
            put(db, "p_grant", {"dev": dev, "scope": given.scope})


def tell_route(db: sqlite3.Connection, route: str) -> None:
    """Write the route's row from its latest plan."""
    entries = in_order(about(db, f"route:{route}", ("route.planned",)))
    db.execute("DELETE FROM p_route WHERE route = ?", (route,))
    if entries and isinstance(given := entries[-1].fact, RoutePlanned):
        put(db, "p_route", {
            "route": route, "round": given.round, "title": given.title, "day": given.day,
            "sampler": given.sampler,
        })  # fmt: skip


def tell_site(db: sqlite3.Connection, site: str) -> None:
    """Write the site's row in each round that lists it."""
    entries = in_order(about(db, f"site:{site}", ("site.listed", "site.dropped")))
    db.execute("DELETE FROM p_site WHERE site = ?", (site,))
    for round_id in {getattr(entry.fact, "round", "") for entry in entries}:
        mine = [e for e in entries if getattr(e.fact, "round", "") == round_id]
        listed = [e for e in mine if isinstance(e.fact, SiteListed)]
        if not listed or not isinstance(given := listed[-1].fact, SiteListed):
            continue
        put(db, "p_site", {
            "site": site, "round": round_id, "tap": given.tap, "tier": given.tier,
            "line": given.line, "plumbing": given.plumbing,
            "dropped": int(isinstance(mine[-1].fact, SiteDropped)), "hash": listed[-1].hash,
            "priv": _priv(db, listed[-1].hash),
        })  # fmt: skip


def protocol_of(db: sqlite3.Connection, sha256: str) -> Protocol | None:
    """Return the protocol under that hash of its text; texts never change, so one parse serves.

    Nothing where the text is not here, or is of a newer program than this one: the visit is kept
    and shown as planned, and no transfer stops on it.
    """
    if sha256 not in _protocols:
        row = db.execute("SELECT toml FROM p_protocol WHERE sha256 = ?", (sha256,)).fetchone()
        if row is None:
            return None
        try:
            _protocols[sha256] = read_protocol(row[0])
        except BadProtocol:
            return None
    return _protocols[sha256]


def _priv(db: sqlite3.Connection, name: str) -> bytes:
    row = db.execute("SELECT priv FROM p_fact WHERE hash = ?", (name,)).fetchone()
    return bytes(row[0]) if row else b""


def key_name(public_key: str) -> str:
    """Return the key id of a public key given as base64url: first 8 bytes of its SHA-256 (B1)."""
    raw = base64.urlsafe_b64decode(public_key + "=" * (-len(public_key) % 4))
    return base64.urlsafe_b64encode(hashlib.sha256(raw).digest()[:8]).rstrip(b"=").decode()
