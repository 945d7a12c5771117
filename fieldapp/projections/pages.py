"""What pages ask: rows of the page tables as mappings, and facts where a rule needs them."""

import json
import sqlite3
from collections.abc import Iterable, Mapping
from datetime import datetime
from typing import Any

from fieldapp.domain.facts import PersonListed, SiteListed, VisitPlanned
from fieldapp.domain.protocols import Protocol
from fieldapp.domain.protocols.standing import Standing
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.projections import facts, summaries

Row = Mapping[str, Any]
_JSON = (
    "months", "protocols", "roles", "places", "analyse", "deviations", "results", "says",
    "evidence", "seals", "broken", "bottles", "seal_read", "missing",
)  # fmt: skip


class Pages:
    """Reads one connection's page tables; inside ``store.act`` it sees that transaction."""

    def __init__(self, db: sqlite3.Connection) -> None:
        self.db = db

    def rows(self, sql: str, given: Iterable[Any] = ()) -> list[Row]:
        """Return rows as mappings; JSON columns come parsed."""
        cursor = self.db.execute(sql, tuple(given))
        names = [column[0] for column in cursor.description]
        return [_row(names, values) for values in cursor.fetchall()]

    def row(self, sql: str, given: Iterable[Any] = ()) -> Row | None:
        """Return the first row, or nothing."""
        found = self.rows(sql, given)
        return found[0] if found else None

    # rounds, routes, people

    def rounds(self) -> list[Row]:
        """Return all rounds, the latest period first."""
        return self.rows("SELECT * FROM p_round ORDER BY from_day DESC, round")

    def round(self, round_id: str) -> Row | None:
        """Return one round."""
        return self.row("SELECT * FROM p_round WHERE round = ?", (round_id,))

    def route(self, route: str) -> Row | None:
        """Return one route with its round's zone."""
        return self.row(
            "SELECT t.*, r.zone, r.title AS round_title, r.rule FROM p_route t"
            " LEFT JOIN p_round r USING (round) WHERE t.route = ?",
            (route,),
        )

    def routes(self, round_id: str = "") -> list[Row]:
        """Return the routes of a round, or all, by day."""
        return self.rows(
            "SELECT t.*, r.zone, r.title AS round_title FROM p_route t LEFT JOIN p_round r"
            " USING (round) WHERE ? IN ('', t.round) ORDER BY t.day, t.route",
            (round_id,),
        )

    def people(self) -> list[Row]:
        """Return the people with their names, where this node may hold them."""
        found = self.rows("SELECT * FROM p_person ORDER BY person")
        return [{**row, **self.private(row["priv"], PersonListed)} for row in found]

    def person(self, person: str) -> Row | None:
        """Return one person with the name."""
        return next((row for row in self.people() if row["person"] == person), None)

    def private(self, priv: bytes, fact_class: type[Any]) -> dict[str, str]:
        """Return the private fields under a hash."""
        return facts.private_of(self.db, priv, fact_class)

    # visits and sites

    def visits(self, *, route: str = "", round_id: str = "") -> list[Row]:
        """Return the visits of a route or a round in their order."""
        return self.rows(
            "SELECT v.*, s.tier, s.line, s.plumbing, s.dropped FROM p_visit v LEFT JOIN p_site s"
            " ON s.site = v.site AND s.round = v.round"
            " WHERE ? IN ('', v.route) AND ? IN ('', v.round)"
            " ORDER BY v.route, v.position, v.visit",
            (route, round_id),
        )

    def visit(self, visit: str) -> Row | None:
        """Return one visit."""
        return self.row("SELECT * FROM p_visit WHERE visit = ?", (visit,))

    def plan(self, visit: str) -> VisitPlanned | None:
        """Return the plan in force of a visit."""
        return summaries.plan_of(self.db, visit, facts.about(self.db, f"visit:{visit}"))

    def recorded(self, visit: str, *, gone: bool = False) -> list[Recorded]:
        """Return what is recorded of a visit."""
        return facts.about(self.db, f"visit:{visit}", gone=gone)

    def standing(self, visit: str, now: Reading) -> Standing | None:
        """Return where the visit stands at this moment."""
        plan = self.plan(visit)
        if plan is None:
            return None
        return summaries.stand_of_visit(self.db, plan, self.recorded(visit), now)

    def protocol(self, sha256: str) -> Protocol | None:
        """Return the protocol a visit is held to."""
        return summaries.protocol_of(self.db, sha256)

    def site(self, site: str, round_id: str, *, private: bool = False) -> Row | None:
        """Return a site; with its private part only where the page is for the site at hand (R6)."""
        found = self.row("SELECT * FROM p_site WHERE site = ? AND round = ?", (site, round_id))
        if found is None or not private:
            return found
        return {**found, **self.private(found["priv"], SiteListed)}

    # bottles, results, findings

    def bottle(self, code: str) -> Row | None:
        """Return one bottle."""
        return self.row("SELECT * FROM p_bottle WHERE bottle = ?", (code,))

    def bottles(self, *, round_id: str = "", visit: str = "", route: str = "") -> list[Row]:
        """Return the bottles of a round, a visit or a route."""
        return self.rows(
            "SELECT * FROM p_bottle WHERE ? IN ('', round) AND ? IN ('', visit)"
            " AND ? IN ('', route) ORDER BY site, visit, draw, bottle",
            (round_id, visit, route),
        )

    def by_number(self, number: str) -> list[str]:
        """Return the codes that were received under that laboratory number."""
        rows = self.db.execute(
            "SELECT bottle FROM p_number WHERE laboratory_number = ? ORDER BY bottle", (number,)
        )
        return [row[0] for row in rows]

    def story(self, subject: str) -> list[Recorded]:
        """Return everything recorded about a subject, replaced and withdrawn entries too."""
        return facts.about(self.db, subject, gone=True)

    def gone(self, names: Iterable[str]) -> dict[str, Row]:
        """Return which of those entries were replaced or withdrawn, and by which."""
        found = {}
        for name in names:
            row = self.row(
                f"SELECT * FROM p_gone g WHERE g.hash = ? AND {facts.STANDING_ANSWER}", (name,)
            )
            if row:
                found[name] = row
        return found

    def fact(self, name: str, *, private: bool = False) -> Recorded | None:
        """Return one entry's fact."""
        return facts.one(self.db, name, with_private=private)

    def reason(self, name: str) -> str:
        """Return why somebody corrected or withdrew by that entry, where this node may hold it."""
        return str(facts.written_with(self.db, name).get("reason", ""))

    def first_of(self, name: str) -> str:
        """Return the entry that a chain of corrections began with."""
        return facts.first_of(self.db, name)

    def corrections(self, name: str) -> list[Recorded]:
        """Return every correction of an entry and of its corrections, in order."""
        return facts.corrections_of(self.db, facts.first_of(self.db, name), gone=True)

    def findings(self, now: datetime, *, round_id: str = "", settled: bool = False) -> list[Row]:
        """Return the findings that are open now; with ``settled`` those that were settled too."""
        return self.rows(
            "SELECT * FROM p_finding WHERE ? IN ('', round) AND opens_at <= ?"
            f"{'' if settled else ' AND settled = ' + chr(39) * 2} ORDER BY kind, about",
            (round_id, summaries.text(now)),
        )

    def unread(self) -> list[Row]:
        """Return entries that this program keeps but cannot read."""
        return self.rows("SELECT * FROM p_unread ORDER BY log, seq")

    def count(self, sql: str, given: Iterable[Any] = ()) -> int:
        """Return a single number."""
        found = self.db.execute(sql, tuple(given)).fetchone()
        return int(found[0] or 0) if found else 0


def _row(names: list[str], values: Iterable[Any]) -> dict[str, Any]:
    pairs = zip(names, values, strict=True)
    return {
        name: json.loads(value) if name in _JSON and isinstance(value, str) else value
        for name, value in pairs
    }
