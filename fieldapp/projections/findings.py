"""The findings of a subject, told anew with it; settlements are looked up by the finding's id."""

import json
import sqlite3
from collections.abc import Sequence

from fieldapp.domain.reconcile import Finding
from fieldapp.projections.facts import LIVING


def write_findings(
    db: sqlite3.Connection, subject: str, round_id: str, site: str, found: Sequence[Finding]
) -> None:
    """Replace the findings of that subject by these."""
    db.execute("DELETE FROM p_finding WHERE subject = ?", (subject,))
    for finding in found:
        settled = db.execute(
            "SELECT f.hash FROM p_about a JOIN p_fact f USING (hash) WHERE a.subject = ?"
            " AND f.kind = 'finding.settled'"
            f" AND {LIVING} ORDER BY f.at DESC, f.log DESC, f.seq DESC",
            (f"finding:{finding.id}",),
        ).fetchone()
        db.execute(
            "INSERT OR REPLACE INTO p_finding (finding, kind, about, subject, round, site, says,"
            " evidence, opens_at, settled) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            (
                finding.id, finding.kind, finding.about, subject, round_id, site,
                json.dumps(finding.values, default=str), json.dumps(finding.evidence),
                finding.opens_at.strftime("%Y-%m-%dT%H:%M:%S.000Z") if finding.opens_at else "",
                settled[0] if settled else "",
            ),
        )  # fmt: skip
