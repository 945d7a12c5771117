"""What the Desk's table of a round and the Bench's list ask: one pass over each table a page."""

from collections.abc import Iterable, Mapping
from datetime import datetime
from typing import Any

from fieldapp.domain.bottles import in_order
from fieldapp.domain.facts import BottleReceived
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections import facts
from fieldapp.projections.pages import Pages, Row

LATEST_RECEIPTS = 2000
"""So many receipts a counter looks back for those of the day; ten days of two hundred bottles."""

_RECEIVED = "outcome IN ('accepted', 'held')"

_SUMS = f"""
    SUM(issued) AS issued, SUM(filled) AS filled, SUM({_RECEIVED}) AS received,
    SUM(outcome = 'held') AS held, SUM(outcome = 'refused') AS refused,
    SUM(to_analyse) AS to_analyse, SUM(resulted) AS resulted
"""

COUNTED = ("issued", "filled", "received", "held", "refused", "to_analyse", "resulted")
"""The counts of bottles, of a round and of each visit."""

_DEVIATES = """EXISTS (
    SELECT 1 FROM p_visit v, json_each(v.deviations) d WHERE v.visit = p_bottle.visit AND (
        EXISTS (SELECT 1 FROM json_each(d.value, '$.draws') w WHERE w.value = p_bottle.draw)
        OR (json_array_length(d.value, '$.draws') = 0 AND p_bottle.kind != 'blank')
    ))"""
"""Of a row of ``p_bottle``: a deviation of its visit bears on it, as ``deviations_on`` says."""

_UNDECIDED = f"""decided = '' AND results = '{{}}' AND (
    outcome = 'held' OR (outcome = 'accepted' AND to_analyse = 1 AND {_DEVIATES}))"""
"""Held, or in before its record came and deviating by it: the Desk decides on both (R8)."""

LISTS: dict[str, str] = {
    "issued": "issued = 1",
    "filled": "filled = 1",
    "not-filled": "issued = 1 AND filled = 0",
    "received": _RECEIVED,
    "not-received": f"filled = 1 AND NOT {_RECEIVED} AND outcome != 'refused'",
    "held": "outcome = 'held'",
    "undecided": _UNDECIDED,
    "refused": "outcome = 'refused'",
    "to-analyse": "to_analyse = 1",
    "with-result": "resulted = 1",
    "without-result": "to_analyse = 1 AND resulted = 0",
    "voided": "voided != ''",
}
"""The lists of bottles that a number of the table opens, each as its condition."""


def totals(pages: Pages, round_id: str) -> dict[str, int]:
    """Return how many bottles of the round were issued, filled, received …

    *Issued* are codes bound to a draw and not voided, *received* is accepted or held,
    *to_analyse* names an analyte and was neither refused nor decided against, *resulted* are
    those of them with every analyte in.
    """
    row = pages.row(f"SELECT {_SUMS} FROM p_bottle WHERE round = ?", (round_id,))
    return {name: int((row or {}).get(name) or 0) for name in COUNTED}


def table(pages: Pages, round_id: str, now: datetime) -> list[dict[str, Any]]:
    """Return a row for each visit of the round: plan, stand, deviations, counts, findings."""
    visits = pages.visits(round_id=round_id)
    counts = {
        row["visit"]: row
        for row in pages.rows(
            f"SELECT visit, {_SUMS} FROM p_bottle WHERE round = ? GROUP BY visit", (round_id,)
        )
    }
    findings = findings_by_visit(pages, round_id, now)
    none = dict.fromkeys(COUNTED, 0)
    return [
        {
            **visit,
            **none,
            **counts.get(visit["visit"], {}),
            "findings": findings.get(visit["visit"], 0),
        }
        for visit in visits
    ]


def findings_by_visit(pages: Pages, round_id: str, now: datetime) -> dict[str, int]:
    """Count the open findings of each visit, its bottles' included."""
    rows = pages.rows(
        "SELECT CASE WHEN f.subject LIKE 'visit:%' THEN substr(f.subject, 7) ELSE b.visit END"
        " AS visit, COUNT(*) AS n FROM p_finding f"
        " LEFT JOIN p_bottle b ON b.bottle = substr(f.subject, 8)"
        " WHERE f.round = ? AND f.settled = '' AND f.opens_at <= ? GROUP BY 1",
        (round_id, text(now)),
    )
    return {row["visit"]: row["n"] for row in rows if row["visit"]}


def bottles(pages: Pages, round_id: str, which: str) -> list[Row]:
    """Return one of the ``LISTS`` of a round's bottles, by site and draw."""
    return pages.rows(
        f"SELECT * FROM p_bottle WHERE round = ? AND {LISTS[which]}"
        " ORDER BY site, visit, draw, bottle",
        (round_id,),
    )


def count(pages: Pages, round_id: str, which: str) -> int:
    """Return how long one of the ``LISTS`` is."""
    return pages.count(
        f"SELECT COUNT(*) FROM p_bottle WHERE round = ? AND {LISTS[which]}", (round_id,)
    )


def strangers(pages: Pages) -> list[Row]:
    """Return the bottles that no round of this node issued and yet somebody filled or received."""
    return pages.rows(
        "SELECT * FROM p_bottle WHERE round = '' AND (filled = 1 OR received_at != '')"
        " ORDER BY received_at, bottle"
    )


def finding(pages: Pages, finding_id: str) -> Row | None:
    """Return one finding, open or settled."""
    return pages.row("SELECT * FROM p_finding WHERE finding = ?", (finding_id,))


def findings_about(pages: Pages, subject: str, now: datetime) -> list[Row]:
    """Return the findings of one subject that are open now or settled.

    A finding of two swapped bottles stands with one of them and is about both.
    """
    what, _, name = subject.partition(":")
    return pages.rows(
        "SELECT * FROM p_finding WHERE (subject = ? OR (kind = 'bottles-swapped'"
        " AND json_extract(says, '$.other') = ?)) AND opens_at <= ? ORDER BY settled != '', kind",
        (subject, name if what == "bottle" else "", text(now)),
    )


def settlements(pages: Pages, kind: str, about: str) -> list[Recorded]:
    """Return the settlements of findings of that kind about that subject, the oldest first.

    New evidence makes a new finding; the former settlement is shown beside it.
    """
    rows = pages.db.execute(
        f"SELECT f.hash FROM p_fact f WHERE f.kind = 'finding.settled' AND {facts.LIVING}"
        " AND json_extract(f.data, '$.kind') = ? AND json_extract(f.data, '$.about') = ?"
        " ORDER BY f.at, f.log, f.seq",
        (kind, about),
    )
    found = (pages.fact(row[0], private=True) for row in rows.fetchall())
    return [entry for entry in found if entry is not None]


def awaited(pages: Pages, round_id: str, now: datetime) -> list[Row]:
    """Return what is still on its way and becomes a finding by time alone (R7), soonest first."""
    return pages.rows(
        "SELECT * FROM p_finding WHERE ? IN ('', round) AND settled = '' AND opens_at > ?"
        " ORDER BY opens_at, about",
        (round_id, text(now)),
    )


def deviations_on(visit: Mapping[str, Any] | None, bottle: Row) -> tuple[Mapping[str, Any], ...]:
    """Return the deviations of a visit that bear on one of its bottles.

    One that names no draw bears on all that came from the tap, so not on a field blank.
    """
    blank = bottle["kind"] == "blank"
    return tuple(
        found
        for found in (visit or {}).get("deviations") or ()
        if (bottle["draw"] in found["draws"] if found["draws"] else not blank)
    )


def last_heard(pages: Pages, route: str) -> str:
    """Return when the latest entry of the tablet that walks that route was made, as UTC text.

    Empty where nothing of it has arrived. The tablet is known by the logs in which the route's
    sampler recorded visits.
    """
    row = pages.row(
        "SELECT MAX(f.at) AS at FROM (SELECT DISTINCT v.log AS log FROM p_visit v"
        " JOIN p_route r USING (route) WHERE v.log != '' AND r.sampler ="
        " (SELECT sampler FROM p_route WHERE route = ?)) l"
        " JOIN p_fact f ON f.log = l.log AND f.seq ="
        " (SELECT MAX(seq) FROM p_fact WHERE log = l.log)",
        (route,),
    )
    return str(row["at"] or "") if row else ""


def latest_receipts(pages: Pages, since: datetime) -> list[Recorded]:
    """Return the living receipts recorded since then, the newest first."""
    rows = pages.db.execute(
        f"SELECT f.hash FROM p_fact f WHERE f.kind = 'bottle.received' AND {facts.LIVING}"
        " ORDER BY f.rowid DESC LIMIT ?",
        (LATEST_RECEIPTS,),
    )
    entries = (pages.fact(row[0]) for row in rows.fetchall())
    return [entry for entry in entries if entry is not None and entry.at >= since]


def receipt_of(pages: Pages, bottle: str) -> Recorded | None:
    """Return the latest living receipt of a bottle, with its reason."""
    found = in_order(facts.about(pages.db, f"bottle:{bottle}", ("bottle.received",)))
    return pages.fact(found[-1].hash, private=True) if found else None


def latest_receipt_by(pages: Pages, person: str) -> Recorded | None:
    """Return the latest living receipt that this person recorded."""
    row = pages.db.execute(
        f"SELECT f.hash FROM p_fact f WHERE f.kind = 'bottle.received' AND f.by = ?"
        f" AND {facts.LIVING} ORDER BY f.rowid DESC LIMIT 1",
        (person,),
    ).fetchone()
    return pages.fact(row[0]) if row else None


def latest_press_by(pages: Pages, person: str) -> Recorded | None:
    """Return the last thing that this person did at the counter: receive, open, take back.

    Nothing where that was taken back itself.
    """
    row = pages.db.execute(
        "SELECT f.hash FROM p_fact f WHERE f.by = ? AND f.kind IN"
        " ('bottle.received', 'cooler.opened', 'entry.withdrawn') ORDER BY f.rowid DESC LIMIT 1",
        (person,),
    ).fetchone()
    found = pages.fact(row[0]) if row else None
    return None if found is None or pages.gone([found.hash]) else found


def latest_number_by(pages: Pages, person: str) -> str:
    """Return the last laboratory number that this person gave a bottle, empty for none yet."""
    row = pages.db.execute(
        "SELECT json_extract(f.data, '$.laboratory_number') FROM p_fact f"
        f" WHERE f.kind = 'bottle.received' AND f.by = ? AND {facts.LIVING}"
        " AND json_extract(f.data, '$.laboratory_number') != '' ORDER BY f.rowid DESC LIMIT 1",
        (person,),
    ).fetchone()
    return str(row[0]) if row else ""


def counted(receipts: Iterable[Recorded]) -> Mapping[str, int]:
    """Count receipts by outcome."""
    counts = {"accepted": 0, "held": 0, "refused": 0}
    for entry in receipts:
        if isinstance(entry.fact, BottleReceived):
            counts[entry.fact.outcome] = counts.get(entry.fact.outcome, 0) + 1
    return counts
