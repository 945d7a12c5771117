"""A bottle's row and its findings."""

import json
import sqlite3

from fieldapp.domain import reconcile
from fieldapp.domain.bottles import BottleStanding, tell
from fieldapp.domain.facts import (
    ResultReported,
)
from fieldapp.domain.reconcile_visits import filled_elsewhere, swapped
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.custody import (
    absent_from,
    boxes_of,
    due_of,
)
from fieldapp.projections.facts import about, living
from fieldapp.projections.findings import write_findings
from fieldapp.projections.plans import protocol_of
from fieldapp.projections.tables import put


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


def _coolers_of(told: BottleStanding) -> list[str]:
    """Return the coolers that packings and receipts of a bottle name."""
    named = (getattr(one.fact, "cooler", "") for one in (*told.packings, *told.receipts))
    return sorted({str(cooler) for cooler in named if cooler})
