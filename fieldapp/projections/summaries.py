"""One summary row a subject, recomputed from its facts whenever one of them changes."""

import sqlite3
from collections.abc import Callable, Iterable

from fieldapp.domain import reconcile
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.bottles import tell_bottle
from fieldapp.projections.custody import (
    coolers_beside,
    tell_cooler,
)
from fieldapp.projections.facts import about, corrections_of, first_of
from fieldapp.projections.findings import write_findings
from fieldapp.projections.plans import key_name as key_name
from fieldapp.projections.plans import protocol_of as protocol_of
from fieldapp.projections.plans import (
    tell_device,
    tell_person,
    tell_protocol,
    tell_round,
    tell_route,
    tell_site,
)
from fieldapp.projections.visits import plan_of as plan_of
from fieldapp.projections.visits import stand_of_visit as stand_of_visit
from fieldapp.projections.visits import tell_visit

__all__ = ["plan_of", "protocol_of", "refresh", "stand_of_visit", "text"]


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
