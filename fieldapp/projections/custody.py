"""Coolers as pages read them: one summary row each, told anew from its facts, and its findings."""

import json
import sqlite3
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from typing import Any

from fieldapp.domain.custody import CoolerStanding, Load, missing_at, set_hash, tell
from fieldapp.domain.facts import CoolerOpened, CoolerSealed, HandoverOffered, HandoverStated
from fieldapp.domain.reconcile_coolers import about_cooler
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import format_utc, parse_duration
from fieldapp.projections.facts import about
from fieldapp.projections.findings import write_findings
from fieldapp.projections.tables import put

_OF_BOTTLES = (
    "bottle.packed", "bottle.located", "bottle.filled", "bottle.received", "receipt.stated",
)  # fmt: skip


def tell_cooler(db: sqlite3.Connection, cooler: str) -> set[str]:
    """Write the cooler's row and findings; return the bottles whose absence hangs on what changed.

    Those are the bottles that are in it or were, and those of its route that are in no cooler.
    """
    before = _row_of(db, cooler)
    told = tell(cooler, _facts_of(db, cooler))
    row = _cooler_row(db, told)
    if not (told.packed or told.sealings or told.openings or told.stated):
        db.execute("DELETE FROM p_cooler WHERE cooler = ?", (cooler,))
    else:
        put(db, "p_cooler", row)
    found = about_cooler(
        told, due=due_of(db, str(row["round"])), box=str(row["box"]), day=str(row["day"])
    )
    write_findings(db, f"cooler:{cooler}", str(row["round"]), "", found)
    after = _row_of(db, cooler)
    return _hanging_on(db, cooler, before, after) if before != after else set()


def _facts_of(db: sqlite3.Connection, cooler: str) -> list[Recorded]:
    """Return the facts about a cooler and those about every bottle that they name."""
    found = about(db, f"cooler:{cooler}")
    codes = {str(getattr(one.fact, "bottle", "")) for one in found} - {""}
    for code in sorted(codes):
        found += about(db, f"bottle:{code}", _OF_BOTTLES)
    return found


def _cooler_row(db: sqlite3.Connection, told: CoolerStanding) -> dict[str, object]:
    first = next(iter((*told.packed, *told.sealings, *told.offers)), None)
    route = str(getattr(first.fact, "route", "")) if first else ""
    planned = db.execute("SELECT round, day FROM p_route WHERE route = ?", (route,)).fetchone()
    opened = told.opening.fact if told.opening else None
    offered = told.offer.fact if told.offer else None
    sealed = told.sealing.fact if told.sealing else None
    return {
        "cooler": told.cooler, "round": planned[0] if planned else "", "route": route,
        "day": planned[1] if planned else "", "box": _box(told), "state": told.state,
        "seals": json.dumps(told.seals), "broken": json.dumps(told.broken),
        "bottles": json.dumps(told.bottles), "packed": len(told.bottles),
        "count": sealed.count if isinstance(sealed, CoolerSealed) else 0,
        "set_hash": set_hash(told.bottles),
        "packed_at": _text(told.packed[0] if told.packed else None),
        "sealed_at": _text(told.sealing), "relinquished_at": _text(told.offer),
        "handed_to": offered.to if isinstance(offered, HandoverOffered) else "",
        "waybill": _waybill(told), "opened_at": _text(told.opening),
        "whole": int(opened.whole) if isinstance(opened, CoolerOpened) else None,
        "seal_read": json.dumps(opened.seal_read if isinstance(opened, CoolerOpened) else ()),
        "counted": opened.count if isinstance(opened, CoolerOpened) else None,
        "received": len(told.out), "missing": json.dumps(told.missing),
        "stated_at": _text(told.stated[-1] if told.stated else None),
        "stated_on": str(getattr(told.stated[-1].fact, "on", "")) if told.stated else "",
        "emptied_at": format_utc(told.emptied_at) if told.emptied_at else "",
        "last_sealed_at": _text(told.sealings[-1] if told.sealings else None),
    }  # fmt: skip


def _box(told: CoolerStanding) -> str:
    named = [str(getattr(one.fact, "box", "")) for one in (*told.packed, *told.sealings)]
    return next((box for box in reversed(named) if box), "")


def _waybill(told: CoolerStanding) -> str:
    given = [one.fact for one in told.statements if isinstance(one.fact, HandoverStated)]
    return given[-1].waybill if given else ""


def _row_of(db: sqlite3.Connection, cooler: str) -> tuple[Any, ...] | None:
    """Return what a bottle's absence reads of a cooler."""
    row = db.execute(
        "SELECT route, box, bottles, last_sealed_at, emptied_at FROM p_cooler WHERE cooler = ?",
        (cooler,),
    ).fetchone()
    return tuple(row) if row else None


def _hanging_on(db: sqlite3.Connection, cooler: str, *rows: tuple[Any, ...] | None) -> set[str]:
    routes = {row[0] for row in rows if row}
    codes = {code for row in rows if row for code in json.loads(row[2])}
    named = db.execute(
        "SELECT DISTINCT b.subject FROM p_about a JOIN p_about b USING (hash)"
        " WHERE a.subject = ? AND b.subject >= 'bottle:' AND b.subject < 'bottle;'",
        (f"cooler:{cooler}",),
    )
    found = {f"bottle:{code}" for code in codes} | {row[0] for row in named.fetchall()}
    for route in routes:
        loose = db.execute(
            "SELECT bottle FROM p_bottle WHERE route = ? AND filled = 1 AND received_at = ''"
            " AND cooler = ''",
            (route,),
        )
        found |= {f"bottle:{row[0]}" for row in loose.fetchall()}
    return found


def coolers_beside(db: sqlite3.Connection, subjects: set[str]) -> set[str]:
    """Return the coolers to tell anew with those bottles, routes and rounds."""
    found: set[str] = set()
    for subject in subjects:
        what = subject.partition(":")[0]
        if what in ("bottle", "route"):
            found |= _named_with(db, subject, "cooler:")
        if what == "round":
            for route in _named_with(db, subject, "route:"):
                found |= _named_with(db, route, "cooler:")
    return found


def _named_with(db: sqlite3.Connection, subject: str, start: str) -> set[str]:
    rows = db.execute(
        "SELECT DISTINCT b.subject FROM p_about a JOIN p_about b USING (hash)"
        " WHERE a.subject = ? AND b.subject >= ? AND b.subject < ?",
        (subject, start, start + "\x7f"),
    )
    return {row[0] for row in rows}


def absent_from(
    db: sqlite3.Connection, filled_at: datetime | None, cooler: str, route: str
) -> datetime | None:
    """Return from when on a bottle that has not arrived is known to be missing; None: not yet."""
    if filled_at is None:
        return None
    what, name = ("cooler", cooler) if cooler else ("route", route)
    rows = db.execute(
        f"SELECT last_sealed_at, emptied_at FROM p_cooler WHERE {what} = ? AND {what} != ''",
        (name,),
    )
    loads = [Load(_instant(row[0]), _instant(row[1])) for row in rows.fetchall()]
    own = next(iter(loads), None) if cooler else None
    return missing_at(filled_at, own, [] if cooler else loads)


def boxes_of(db: sqlite3.Connection, coolers: Sequence[str]) -> dict[str, str]:
    """Return the numbers painted on those coolers."""
    marks = ", ".join("?" for _ in coolers)
    rows = db.execute(f"SELECT cooler, box FROM p_cooler WHERE cooler IN ({marks})", coolers)
    return dict(rows.fetchall())


def due_of(db: sqlite3.Connection, round_id: str) -> timedelta | None:
    """Return the round's time from filling to receipt, None where it names none."""
    row = db.execute("SELECT due FROM p_round WHERE round = ?", (round_id,)).fetchone()
    return parse_duration(row[0]) if row and row[0] else None


def _instant(text: str) -> datetime | None:
    return datetime.fromisoformat(text).astimezone(UTC) if text else None


def _text(entry: Recorded | None) -> str:
    return format_utc(entry.done_at) if entry else ""
