"""A visit's row: where it stands after its latest entry, and its findings."""

import json
import sqlite3
from collections.abc import Iterable
from dataclasses import asdict

from fieldapp.domain import reconcile
from fieldapp.domain.bottles import in_order
from fieldapp.domain.facts import (
    BottleFilled,
    BottleIssued,
    BottleSet,
    VisitPlanned,
)
from fieldapp.domain.protocols.standing import Standing
from fieldapp.domain.protocols.where import where
from fieldapp.domain.reconcile_visits import short_stand
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.facts import about, living
from fieldapp.projections.findings import write_findings
from fieldapp.projections.plans import protocol_of
from fieldapp.projections.tables import put


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
