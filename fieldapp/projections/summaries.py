"""One summary row a subject, recomputed from its facts whenever one of them changes."""

import base64
import hashlib
import json
import sqlite3
from collections.abc import Callable, Iterable
from dataclasses import asdict
from datetime import datetime

from fieldapp.domain import reconcile
from fieldapp.domain.bottles import BottleStanding, in_order, tell
from fieldapp.domain.facts import (
    BottleFilled,
    BottleIssued,
    BottleSet,
    DeviceEnrolled,
    DeviceGranted,
    PersonListed,
    ProtocolKept,
    ResultReported,
    RoundOpened,
    RoutePlanned,
    SiteDropped,
    SiteListed,
    VisitPlanned,
)
from fieldapp.domain.protocols import BadProtocol, Protocol, read_protocol
from fieldapp.domain.protocols.standing import Standing
from fieldapp.domain.protocols.where import where
from fieldapp.domain.reconcile_visits import filled_elsewhere, short_stand, swapped
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.projections.custody import (
    absent_from,
    boxes_of,
    coolers_beside,
    due_of,
    tell_cooler,
)
from fieldapp.projections.facts import about, corrections_of, first_of, living
from fieldapp.projections.findings import write_findings
from fieldapp.projections.tables import put

_protocols: dict[str, Protocol] = {}


def refresh(db: sqlite3.Connection, subjects: Iterable[str]) -> None:
    """Tell those subjects anew, and what hangs on them.

    A visit's bottles, a bottle's visits and coolers; of a cooler that comes to be known empty, the
    bottles that did not come out of it.
    """
    told = set(subjects)
    wanted = _widened(db, told | _hanging(db, told)) | coolers_beside(db, told)
    for what in ORDER:
        for subject in sorted(s for s in wanted if s.startswith(f"{what}:")):
            wanted |= ORDER[what](db, subject.partition(":")[2]) or set()


def _hanging(db: sqlite3.Connection, subjects: set[str]) -> set[str]:
    """Return the visits and bottles told under a round or protocol that changes now.

    They may have come before it: then they were told without its due time or its steps.
    """
    found: set[str] = set()
    for what, table in (("round", "p_round"), ("protocol", "p_protocol")):
        for subject in [s for s in subjects if s.startswith(f"{what}:")]:
            name = subject.partition(":")[2]
            rows = f"SELECT * FROM {table} WHERE {what} = ? ORDER BY 1"
            before = db.execute(rows, (name,)).fetchall()
            ORDER[what](db, name)
            if db.execute(rows, (name,)).fetchall() != before:
                found |= _beside(db, subject, "visit:") | _beside(db, subject, "bottle:")
    return found


def _beside(db: sqlite3.Connection, subject: str, start: str) -> set[str]:
    """Return the subjects of that sort which stand in one fact with this subject."""
    rows = db.execute(
        "SELECT DISTINCT b.subject FROM p_about a JOIN p_about b USING (hash)"
        " WHERE a.subject = ? AND b.subject >= ? AND b.subject < ?",
        (subject, start, start + "\x7f"),
    )
    return {row[0] for row in rows}


def _widened(db: sqlite3.Connection, subjects: set[str]) -> set[str]:
    """Add the visits of each bottle, then the bottles of each visit."""
    wide = set(subjects)
    for start, end in (("bottle:", "visit:"), ("visit:", "bottle:")):
        for subject in [s for s in wide if s.startswith(start)]:
            wide |= _beside(db, subject, end)
    return wide


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


def tell_visit(db: sqlite3.Connection, visit: str) -> None:
    """Write the visit's row: where it stands after its latest entry, and its findings."""
    entries = about(db, f"visit:{visit}")
    db.execute("DELETE FROM p_visit WHERE visit = ?", (visit,))
    plan = plan_of(db, visit, entries)
    if plan is None:
        write_findings(db, f"visit:{visit}", "", "", [])
        return
    latest = in_order(entries)[-1]
    now = Reading(latest.at, latest.off, latest.mono, latest.boot)
    told = stand_of_visit(db, plan, entries, now)
    put(db, "p_visit", _visit_row(plan, entries, told))
    issued = living(entries, "bottle.issued")
    standing = [e for e in issued if not _voided(db, str(getattr(e.fact, "bottle", "")))]
    found = reconcile.two_codes(visit, standing)
    found += short_stand(visit, told.deviations if told else ())
    write_findings(db, f"visit:{visit}", plan.round, plan.site, found)


def _voided(db: sqlite3.Connection, bottle: str) -> bool:
    return bool(about(db, f"bottle:{bottle}", ("bottle.voided",)))


def plan_of(db: sqlite3.Connection, visit: str, entries: Iterable[Recorded]) -> VisitPlanned | None:
    """Return the plan in force of a visit: the latest one written.

    A visit that was begun keeps its last plan though the round dropped it since (R20).
    """
    known = list(entries)
    plans = living(known, "visit.planned")
    if not plans and any(entry.fact.place == "kitchen" for entry in known):
        plans = about(db, f"visit:{visit}", ("visit.planned",), gone=True)
    found = in_order(plans)[-1].fact if plans else None
    return found if isinstance(found, VisitPlanned) else None


def stand_of_visit(
    db: sqlite3.Connection, plan: VisitPlanned, entries: Iterable[Recorded], now: Reading
) -> Standing | None:
    """Return where the visit stands, or nothing while its protocol's text has not arrived."""
    protocol = protocol_of(db, plan.sha256)
    if protocol is None:
        return None
    row = db.execute("SELECT keep_poured FROM p_round WHERE round = ?", (plan.round,)).fetchone()
    recorded = list(entries)
    recorded += _printed_elsewhere(db, recorded)
    return where(protocol, plan, recorded, now, keep_poured=bool(row and row[0]))


def _printed_elsewhere(db: sqlite3.Connection, entries: Iterable[Recorded]) -> list[Recorded]:
    """Return the issues of bottles that this visit took and that were printed for another."""
    taken, printed = set(), set()
    for entry in entries:
        if isinstance(entry.fact, BottleFilled | BottleSet):
            taken.add(entry.fact.bottle)
        if isinstance(entry.fact, BottleIssued):
            printed.add(entry.fact.bottle)
    strange = sorted(taken - printed)
    return [e for code in strange for e in about(db, f"bottle:{code}", ("bottle.issued",))]


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


def _visit_row(
    plan: VisitPlanned, entries: list[Recorded], told: Standing | None
) -> dict[str, object]:
    opened, closed = living(entries, "visit.opened"), living(entries, "visit.closed")
    stand = told.stand if told else None
    acts = [e for e in in_order(entries) if e.fact.place == "kitchen"]
    return {
        "visit": plan.visit, "round": plan.round, "route": plan.route, "site": plan.site,
        "tap": plan.tap, "protocol": plan.protocol, "sha256": plan.sha256,
        "position": plan.position, "state": told.state if told else "planned",
        "due": told.due.kind if told else "", "number": told.number if told else 0,
        "of": told.of if told else 0, "stand_basis": stand.basis if stand else "",
        "stand_shortest_s": int(stand.shortest.total_seconds()) if stand else None,
        "stand_longest_s": int(stand.longest.total_seconds()) if stand else None,
        "stand_verdict": told.stand_verdict if told else "",
        "earliest_draw": text(told.earliest_draw) if told and told.earliest_draw else "",
        "deviations": _deviations(told),
        "outcome": str(getattr(closed[-1].fact, "outcome", "")) if closed else "",
        "opened_at": text(opened[0].done_at) if opened else "",
        "closed_at": text(closed[-1].done_at) if closed else "",
        "touched": int(bool(acts)), "log": acts[-1].log if acts else "",
    }  # fmt: skip


def _deviations(told: Standing | None) -> str:
    return json.dumps([asdict(d) for d in told.deviations] if told else [], default=str)


def tell_bottle(db: sqlite3.Connection, bottle: str) -> None:
    """Write the bottle's row and its findings."""
    told = tell(bottle, about(db, f"bottle:{bottle}"))
    row = _bottle_row(db, told)
    put(db, "p_bottle", row)
    db.execute("DELETE FROM p_number WHERE bottle = ?", (bottle,))
    for number in told.numbers:
        put(db, "p_number", {"laboratory_number": number, "bottle": bottle})
    closed = living(about(db, f"visit:{told.visit}", ("visit.closed",)), "visit.closed")
    found = reconcile.about_bottle(
        told,
        due=due_of(db, str(row["round"])),
        visit_closed=closed[-1] if closed else None,
        missing_at=absent_from(db, told.filled_at, told.cooler, str(row["route"])),
        boxes=boxes_of(db, _coolers_of(told)),
    )
    found += _swapped(db, told)
    write_findings(db, f"bottle:{bottle}", str(row["round"]), str(row["site"]), found)


def _swapped(db: sqlite3.Connection, told: BottleStanding) -> list[reconcile.Finding]:
    """Look for the bottle that was filled in this one's place, where this one is in another's."""
    away = filled_elsewhere(told)
    if not away or told.plan is None:
        return []
    visits = (told.plan.visit, away)
    issued = [e for visit in visits for e in about(db, f"visit:{visit}", ("bottle.issued",))]
    codes = sorted({str(getattr(e.fact, "bottle", "")) for e in issued} - {told.bottle})
    others = [tell(code, about(db, f"bottle:{code}")) for code in codes]
    rows = db.execute("SELECT visit, site FROM p_visit WHERE visit IN (?, ?)", visits)
    return swapped(told, others, dict(rows.fetchall()))


def _bottle_row(db: sqlite3.Connection, told: BottleStanding) -> dict[str, object]:
    plan, receipt = told.plan, told.receipt
    visit = db.execute(
        "SELECT round, route, site, sha256 FROM p_visit WHERE visit = ?", (told.visit,)
    ).fetchone()
    round_id = plan.round if plan else (visit[0] if visit else "")
    volume_ml, analyse = _draw_of(db, told, visit[3] if visit else "")
    decided = told.decision
    refused = receipt is not None and receipt.outcome == "refused"
    dropped = decided is not None and not decided.analyse
    to_analyse = bool(analyse) and not refused and not dropped and not told.voided
    return {
        "bottle": told.bottle, "round": round_id,
        "route": plan.route if plan else (visit[1] if visit else ""),
        "visit": told.visit, "site": visit[2] if visit else "",
        "printed_for": plan.visit if plan else "", "draw": told.draw, "kind": told.kind,
        "purpose": told.purpose, "volume_ml": volume_ml, "analyse": json.dumps(analyse),
        "preservative": plan.preservative if plan else "none",
        "issued": int(bool(plan) and not told.voided and bool(told.draw or told.fillings)),
        "voided": str(getattr(told.voided.fact, "why", "")) if told.voided else "",
        "spare": int(told.spare), "printed": told.printed,
        "set_at": text(told.sets[-1].done_at) if told.sets else "",
        "filled_at": text(told.filled_at) if told.filled_at else "",
        "filled": int(bool(told.fillings)),
        "fill": str(getattr(told.fillings[-1].fact, "fill", "")) if told.fillings else "",
        **_received(told),
        "cooler": told.cooler, "located": told.whereabouts,
        "decided": "" if decided is None else ("analyse" if decided.analyse else "leave"),
        "results": json.dumps(_results(told)),
        "resulted": int(to_analyse and set(analyse) <= set(told.results)),
        "to_analyse": int(to_analyse),
    }  # fmt: skip


def _received(told: BottleStanding) -> dict[str, object]:
    """Return the receipt that stands: the laboratory's own, else the one stated at the Desk (R12).

    What a laboratory says that it received counts as accepted.
    """
    came = told.receipts or told.stated
    stated = "accepted" if told.stated else ""
    number = told.receipt.laboratory_number if told.receipt else ""
    return {
        "received_at": text(came[-1].done_at) if came else "",
        "outcome": told.receipt.outcome if told.receipt else stated,
        "laboratory_number": number or (told.numbers[-1] if told.numbers else ""),
        "receipt_basis": "stated" if came and not told.receipts else "",
    }


def _draw_of(db: sqlite3.Connection, told: BottleStanding, sha256: str) -> tuple[int, list[str]]:
    """Return volume and analyses as issued; of a spare, those of the draw it was bound to."""
    if told.plan and told.plan.draw and not told.moved:
        return told.plan.volume_ml, list(told.plan.analyse)
    protocol = protocol_of(db, sha256) if sha256 else None
    for draw in protocol.draws() if protocol else ():
        if draw.draw == told.draw:
            return draw.volume_ml, list(draw.analyse)
    if told.kind == "blank" and protocol:
        return 1000, list(protocol.analytes)
    return 0, []


def _results(told: BottleStanding) -> dict[str, dict[str, object]]:
    """Return the latest result of each analyte; a provisional one yields to a reported one."""
    latest: dict[str, dict[str, object]] = {}
    for analyte, entries in told.results.items():
        final = [e for e in entries if not getattr(e.fact, "provisional", False)] or list(entries)
        given = final[-1].fact
        assert isinstance(given, ResultReported)
        latest[analyte] = {"hash": final[-1].hash, **given.data()}
    return latest


def tell_finding(db: sqlite3.Connection, finding: str) -> None:
    """Mark the finding settled, or open again where the settlement was withdrawn."""
    settled = about(db, f"finding:{finding}", ("finding.settled",))
    mark = settled[-1].hash if settled else ""
    db.execute("UPDATE p_finding SET settled = ? WHERE finding = ?", (mark, finding))


def tell_entry(db: sqlite3.Connection, of: str) -> None:
    """Find an entry that two living corrections replace, whichever of them is told of here.

    A correction of a correction takes its place, so the finding is that of the first entry.
    """
    first = first_of(db, of)
    for name in {of, first}:
        found = corrections_of(db, first) if name == first else []
        write_findings(db, f"entry:{name}", "", "", reconcile.corrected_twice(first, found))


def _coolers_of(told: BottleStanding) -> list[str]:
    """Return the coolers that packings and receipts of a bottle name."""
    named = (getattr(one.fact, "cooler", "") for one in (*told.packings, *told.receipts))
    return sorted({str(cooler) for cooler in named if cooler})


def _priv(db: sqlite3.Connection, name: str) -> bytes:
    row = db.execute("SELECT priv FROM p_fact WHERE hash = ?", (name,)).fetchone()
    return bytes(row[0]) if row else b""


def text(at: datetime) -> str:
    """Return an instant as the ledger writes it: UTC with milliseconds."""
    return at.strftime("%Y-%m-%dT%H:%M:%S.") + f"{at.microsecond // 1000:03d}Z"


def key_name(public_key: str) -> str:
    """Return the key id of a public key given as base64url: first 8 bytes of its SHA-256 (B1)."""
    raw = base64.urlsafe_b64decode(public_key + "=" * (-len(public_key) % 4))
    return base64.urlsafe_b64encode(hashlib.sha256(raw).digest()[:8]).rstrip(b"=").decode()


ORDER: dict[str, Callable[[sqlite3.Connection, str], set[str] | None]] = {
    "round": tell_round,
    "protocol": tell_protocol,
    "person": tell_person,
    "dev": tell_device,
    "route": tell_route,
    "site": tell_site,
    "visit": tell_visit,
    "cooler": tell_cooler,
    "bottle": tell_bottle,
    "entry": tell_entry,
    "finding": tell_finding,
}
