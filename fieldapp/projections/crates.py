"""What the Kitchen's count and the Desk ask of crates and coolers."""

from fieldapp.domain.bottles import in_order
from fieldapp.domain.custody import plain_seal
from fieldapp.domain.facts import CrateCounted
from fieldapp.domain.recorded import Recorded
from fieldapp.projections.facts import LIVING, about
from fieldapp.projections.pages import Pages, Row

PRESSES = (
    "crate.counted", "bottle.located", "bottle.packed", "cooler.sealed", "cooler.reopened",
    "handover.offered", "handover.stated",
)  # fmt: skip
"""What a sampler records of the crate and its coolers."""


def cooler(pages: Pages, cooler_id: str) -> Row | None:
    """Return one cooler."""
    return pages.row("SELECT * FROM p_cooler WHERE cooler = ?", (cooler_id,))


def coolers(pages: Pages, *, route: str = "", round_id: str = "") -> list[Row]:
    """Return the coolers of a route or a round, in the order in which they were packed."""
    return pages.rows(
        "SELECT * FROM p_cooler WHERE ? IN ('', route) AND ? IN ('', round)"
        " ORDER BY route, packed_at, cooler",
        (route, round_id),
    )


def loose(pages: Pages, route: str) -> list[Row]:
    """Return the filled bottles of a route that are in no cooler and not received."""
    return pages.rows(
        "SELECT * FROM p_bottle WHERE route = ? AND filled = 1 AND cooler = ''"
        " AND received_at = '' ORDER BY filled_at, bottle",
        (route,),
    )


def loose_of(pages: Pages, round_id: str) -> list[Row]:
    """Return the filled bottles of a round that are in no cooler and not received."""
    return pages.rows(
        "SELECT * FROM p_bottle WHERE round = ? AND filled = 1 AND cooler = ''"
        " AND received_at = '' ORDER BY filled_at, bottle",
        (round_id,),
    )


def bearing(pages: Pages, seal: str) -> Row | None:
    """Return the cooler that bears that seal or bore it until it was broken."""
    wanted = plain_seal(seal)
    for row in coolers(pages):
        if wanted in {plain_seal(one) for one in (*row["seals"], *row["broken"])}:
            return row
    return None


def day_counts(pages: Pages, route: str) -> dict[str, int]:
    """Return the day's counts of a route (R17): planned, filled, poured, voided, spares, refused.

    ``planned`` are the codes issued for its draws, ``empty`` those not filled and not voided,
    ``spares`` the unused codes bound to nothing, ``without`` the visits that ended without their
    bottles.
    """
    row = pages.row(
        "SELECT SUM(issued) AS planned, SUM(filled) AS filled, SUM(voided != '') AS voided,"
        " SUM(spare = 0 AND filled = 0 AND voided = '') AS empty,"
        " SUM(spare = 1 AND filled = 0 AND voided = '') AS spares,"
        " SUM(filled = 1 AND cooler != '') AS packed FROM p_bottle WHERE route = ?",
        (route,),
    )
    counts = {name: int(value or 0) for name, value in (row or {}).items()}
    counts["without"] = pages.count(
        "SELECT COUNT(*) FROM p_visit WHERE route = ? AND outcome NOT IN ('', 'done')", (route,)
    )
    counts["poured"] = pages.count(
        "SELECT COUNT(*) FROM p_visit v JOIN p_about a ON a.subject = 'visit:' || v.visit"
        " JOIN p_fact f USING (hash) WHERE v.route = ? AND f.kind = 'draw.poured'"
        f" AND {LIVING}",
        (route,),
    )
    return counts


def doors(pages: Pages, route: str) -> list[Row]:
    """Return the visits left or closed with full bottles that nobody counted into the crate."""
    rows = pages.rows(
        "SELECT visit, site, state FROM p_visit WHERE route = ? AND state IN ('left', 'closed')"
        " AND visit IN (SELECT visit FROM p_bottle WHERE route = ? AND filled = 1"
        " AND cooler = '' AND received_at = '') ORDER BY position, visit",
        (route, route),
    )
    found = [{**row, "full": _uncounted(pages, row["visit"])} for row in rows]
    return [row for row in found if row["full"]]


def carried(pages: Pages, visit: str) -> list[str]:
    """Return the full bottles of a visit that should be in the crate."""
    return [
        str(one["bottle"])
        for one in pages.bottles(visit=visit)
        if one["filled"] and not (one["cooler"] or one["located"] or one["received_at"])
    ]


def _uncounted(pages: Pages, visit: str) -> list[str]:
    """Return what should be in the crate, nothing where the last count found it all there."""
    full = carried(pages, visit)
    counts = in_order(about(pages.db, f"visit:{visit}", ("crate.counted",)))
    last = counts[-1].fact if counts else None
    if isinstance(last, CrateCounted) and last.count >= len(last.bottles):
        return [] if set(full) <= set(last.bottles) else full
    return full


def latest_press(pages: Pages, route: str) -> Recorded | None:
    """Return the latest living custody press on a route."""
    found = in_order(about(pages.db, f"route:{route}", PRESSES))
    return found[-1] if found else None


def last_of(pages: Pages, person: str) -> Recorded | None:
    """Return the last entry that this person recorded at this node."""
    row = pages.db.execute(
        "SELECT hash FROM p_fact WHERE by = ? ORDER BY rowid DESC LIMIT 1", (person,)
    ).fetchone()
    return pages.fact(row[0]) if row else None
