"""What the coordinator's side may do with a plan: open a round, amend it, issue bottles.

Raised rules are kinds with values; their sentences stand in ``words.py``.
"""

from collections.abc import Iterable, Sequence
from typing import Any

from fieldapp.domain.codes import new_code
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import (
    BottleIssued,
    BottleVoided,
    DeviceGranted,
    EntryWithdrawn,
    Fact,
    LabelsPrinted,
    RoutePlanned,
    VisitPlanned,
)
from fieldapp.domain.protocols import Protocol
from fieldapp.projections.pages import Pages, Row


class RoundKnown(RuleBroken):
    """A file of a known round differs from what stands and nobody asked to amend it."""

    kind = "round-known"


class NothingToPrint(RuleBroken):
    """A route without a single planned draw."""

    kind = "nothing-to-print"


class RouteNotHere(RuleBroken):
    """Codes are issued on the node that imported the round (issue by one hand, R15)."""

    kind = "route-not-here"


def grants_for(pages: Pages, facts: Iterable[Fact]) -> list[Fact]:
    """Return the grants that newly planned routes bring to their samplers' devices."""
    made: list[Fact] = []
    for given in facts:
        if isinstance(given, RoutePlanned):
            devices = pages.rows(
                "SELECT DISTINCT dev FROM p_device WHERE person = ?", (given.sampler,)
            )
            made += [
                DeviceGranted(dev=row["dev"], scope=f"route:{given.route}")
                for row in devices
                if not _granted(pages, row["dev"], f"route:{given.route}")
            ]
    return made


def withdrawals(pages: Pages, dropped: Iterable[Fact]) -> list[Fact]:
    """Return what takes a dropped visit, route or person out of the plan.

    The codes printed for a dropped visit are voided: no bottle is expected from it any more.
    """
    made: list[Fact] = []
    for given in dropped:
        if isinstance(given, VisitPlanned):
            made += [
                BottleVoided(bottle=bottle["bottle"], why="visit-dropped")
                for bottle in pages.rows(
                    "SELECT bottle FROM p_bottle WHERE printed_for = ? AND filled = 0"
                    " AND received_at = '' AND voided = ''",
                    (given.visit,),
                )
            ]
        subject = given.subjects()
        for entry in pages.story(subject[0]) if subject else []:
            if entry.fact == given and entry.hash not in pages.gone([entry.hash]):
                made.append(EntryWithdrawn(of=entry.hash, reason="no longer in the round"))
    return made


def issue_bottles(
    pages: Pages, route: str, *, spare: int = 0, issuing: bool = True
) -> tuple[list[Fact], list[str]]:
    """Return the facts of printing a route's labels, and the codes on them in order.

    A planned draw that has a living code keeps it: printing again gives the same codes, recorded
    as a reprint (R15). ``spare`` asks for so many spares in all.

    Raises:
        RouteNotHere: planned draws lack codes and this node may not issue them.
        NothingToPrint: there is nothing to label.
    """
    row = pages.route(route)
    if row is None:
        raise Unknown(what="route", name=route)
    held = pages.bottles(route=route)
    issued: list[BottleIssued] = []
    codes: list[str] = []
    for visit in pages.visits(route=route):
        for wanted in labelled(pages, visit):
            code = _standing_code(held, visit["visit"], wanted["draw"])
            if code is None:
                made = _issue(row, visit, wanted)
                issued.append(made)
                code = made.bottle
            codes.append(code)
    if issued and not issuing:
        raise RouteNotHere(route=route)
    spares = [b["bottle"] for b in held if b["spare"] and not b["voided"] and not b["filled"]]
    for _ in range(max(0, spare - len(spares))):
        made = BottleIssued(bottle=new_code(), round=row["round"], route=route)
        issued.append(made)
        spares.append(made.bottle)
    codes += spares[:spare] if spare else []
    if not codes:
        raise NothingToPrint(route=route)
    copy = 1 + max([b["printed"] for b in held if b["bottle"] in codes], default=0)
    return [*issued, *_printed(route, codes, copy)], codes


def labelled(pages: Pages, visit: Row) -> list[dict[str, Any]]:
    """Return the draws of a visit that need a label: planned, kept, never a poured litre (R3)."""
    plan, protocol = pages.plan(visit["visit"]), pages.protocol(visit["sha256"])
    if plan is None or protocol is None:
        return []
    return [draw_of(plan, protocol, int(planned["draw"])) for planned in plan.draws]


def draw_of(plan: VisitPlanned, protocol: Protocol, number: int) -> dict[str, Any]:
    """Return what one planned draw is: kind, purpose, volume and analyses."""
    planned = next((d for d in plan.draws if int(d["draw"]) == number), {})
    known = next((d for d in protocol.draws() if d.draw == number), None)
    kind = str(planned.get("kind", "")) or (known.kind if known else "")
    if known is not None:
        return {
            "draw": number, "kind": kind, "purpose": str(planned.get("purpose", "")),
            "volume_ml": known.volume_ml, "analyse": tuple(known.analyse),
        }  # fmt: skip
    # a blank or a duplicate takes the bottle and the analyses of the first draw
    first = protocol.draws()[0]
    return {
        "draw": number, "kind": kind, "purpose": str(planned.get("purpose", "")),
        "volume_ml": first.volume_ml, "analyse": tuple(first.analyse),
    }  # fmt: skip


def _issue(route: Row, visit: Row, wanted: dict[str, Any]) -> BottleIssued:
    return BottleIssued(
        bottle=new_code(),
        round=route["round"],
        route=route["route"],
        visit=visit["visit"],
        draw=wanted["draw"],
        kind_=wanted["kind"],
        purpose=wanted["purpose"],
        volume_ml=wanted["volume_ml"],
        analyse=wanted["analyse"],
        preservative="none",
    )


def _standing_code(held: Sequence[Row], visit: str, draw: int) -> str | None:
    for bottle in held:
        if bottle["printed_for"] == visit and bottle["draw"] == draw and not bottle["voided"]:
            return str(bottle["bottle"])
    return None


# an entry body holds 8 KiB: so many codes fit with room to spare
_CODES_AN_ENTRY = 400


def _printed(route: str, codes: Sequence[str], copy: int) -> list[Fact]:
    return [
        LabelsPrinted(route=route, bottles=tuple(codes[i : i + _CODES_AN_ENTRY]), copy=copy)
        for i in range(0, len(codes), _CODES_AN_ENTRY)
    ]


def _granted(pages: Pages, dev: str, scope: str) -> bool:
    return pages.row("SELECT 1 FROM p_grant WHERE dev = ? AND scope = ?", (dev, scope)) is not None
