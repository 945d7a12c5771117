"""Import a round file: open the round, or append what a changed file changes (R20)."""

import base64
from collections.abc import Callable, Sequence
from typing import Any

from fieldapp.commands import plan
from fieldapp.domain.bottles import in_order
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import Fact, RoundOpened
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.identity import new_act
from fieldapp.projections import facts
from fieldapp.projections.pages import Pages
from fieldapp.reading.difference import Change, difference, to_append
from fieldapp.reading.rounds import RoundFile, read_round
from fieldapp.store import Store


class TakenElsewhere(RuleBroken):
    """A route or visit of this file is known under another round."""

    kind = "taken-elsewhere"


def import_round(
    store: Store, *, file: str, data: str, amend: bool = False, progress: Callable[..., None]
) -> dict[str, Any]:
    """Import a round file.

    Args:
        file: Its name, for the reader.
        data: Its bytes as base64.
        amend: Append the differences of a known round.

    Returns:
        ``round``, ``facts`` appended, ``changes`` in lines, ``notes`` in lines, ``known``.
    """
    found = read_round(base64.b64decode(data), file)
    progress("read", 1, 2)
    answer = store.act(
        new_act(),
        {"round": found.sha256, "amend": amend},
        lambda pages, _reading: _decide(pages, _reading, found, amend),
        by="",
    )
    progress("recorded", 2, 2)
    return {**answer.answer, "notes": [note.line for note in found.notes]}


def _decide(pages: Pages, _reading: Reading, found: RoundFile, amend: bool) -> Decision:
    _check_ids(pages, found)
    standing = standing_plan(pages, found)
    known = any(isinstance(given, RoundOpened) for given in standing)
    changes: Sequence[Change] = ()
    if not known:
        wanted: list[Fact] = [given for given in found.facts if given not in standing]
    else:
        changes = difference(standing, found.facts, visited=_visited(pages, found.round.round))
        wanted = list(to_append(changes)) if amend else []
        dropped = [c.before for c in changes if c.kind in _DROPPED and c.before is not None]
        wanted += plan.withdrawals(pages, dropped) if amend else []
    wanted += plan.grants_for(pages, wanted)
    return Decision(
        wanted,
        {
            "round": found.round.round,
            "known": known,
            "facts": len(wanted),
            "changes": list(dict.fromkeys(line(change) for change in changes)),
            "amended": amend,
        },
    )


_DROPPED = ("visit-dropped", "route-dropped", "person-dropped")


def line(change: Change) -> str:
    """Return a difference in one line; private text never shows, only which fields differ."""
    differs = f" ({', '.join(change.fields)})" if change.fields else ""
    return f"{change.kind} {change.about}{differs}"


def standing_plan(pages: Pages, found: RoundFile) -> list[Fact]:
    """Return the living facts of the plan that this file speaks of, later ones last."""
    subjects = [f"round:{found.round.round}"]
    subjects += [f"protocol:{kept.protocol}" for kept in found.protocols]
    subjects += [f"person:{person.person}" for person in found.people]
    entries: dict[str, Recorded] = {}
    for subject in subjects:
        for entry in facts.about(pages.db, subject, _PLAN, with_private=True):
            entries[entry.hash] = entry
    return [entry.fact for entry in in_order(entries.values())]


_PLAN = (
    "round.opened", "round.changed", "protocol.kept", "person.listed", "site.listed",
    "site.dropped", "route.planned", "visit.planned",
)  # fmt: skip


def _visited(pages: Pages, round_id: str) -> frozenset[str]:
    rows = pages.rows("SELECT visit FROM p_visit WHERE round = ? AND touched = 1", (round_id,))
    return frozenset(str(row["visit"]) for row in rows)


def _check_ids(pages: Pages, found: RoundFile) -> None:
    """Refuse a route or visit id that another round uses: labels and slips name it alone."""
    for visit in found.visits:
        row = pages.visit(visit.visit)
        if row is not None and row["round"] != found.round.round:
            raise TakenElsewhere(what="visit", name=visit.visit, round=row["round"])
    for route in found.routes:
        row = pages.route(route.route)
        if row is not None and row["round"] != found.round.round:
            raise TakenElsewhere(what="route", name=route.route, round=row["round"])
