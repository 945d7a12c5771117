"""By which words an entry is pulled: the store sets them when it signs (design 5)."""

from fieldapp.domain.facts import (
    ALL,
    CENTRAL,
    ROUTE_LAB,
    EntryCorrected,
    EntryWithdrawn,
    Fact,
    SiteDropped,
)
from fieldapp.projections.pages import Pages


def scope_of(pages: Pages, given: Fact) -> list[str]:
    """Return the scope words of a fact about to be signed.

    A correction or withdrawal goes where the entry it answers went.
    """
    if given.reach == ALL:
        return ["all"]
    if given.reach == CENTRAL:
        return []
    if isinstance(given, EntryCorrected | EntryWithdrawn):
        answered = pages.fact(given.of)
        if answered is None:
            return []  # nobody here knows where the entry went, so nobody else is told
        return scope_of(pages, answered.fact)
    if isinstance(given, SiteDropped):
        return [f"route:{route}" for route in _routes_to(pages, given)]
    route = _route_of(pages, given)
    words = [f"route:{route}"] if route else []
    if given.reach == ROUTE_LAB and (laboratory := _laboratory_of(pages, given, route)):
        words.append(f"lab:{laboratory}")
    return words


def _routes_to(pages: Pages, given: SiteDropped) -> list[str]:
    """Return the routes that visit a site: a site names none itself when it leaves the round."""
    rows = pages.rows(
        "SELECT DISTINCT route FROM p_visit WHERE site = ? AND round = ? ORDER BY route",
        (given.site, given.round),
    )
    return [str(row["route"]) for row in rows]


def _route_of(pages: Pages, given: Fact) -> str:
    if route := getattr(given, "route", ""):
        return str(route)
    if visit := getattr(given, "visit", ""):
        row = pages.visit(str(visit))
        return str(row["route"]) if row else ""
    if bottle := getattr(given, "bottle", ""):
        row = pages.bottle(str(bottle))
        return str(row["route"]) if row else ""
    if cooler := getattr(given, "cooler", ""):
        entries = pages.story(f"cooler:{cooler}")
        return next((str(r) for e in entries if (r := getattr(e.fact, "route", ""))), "")
    return ""


def _laboratory_of(pages: Pages, given: Fact, route: str) -> str:
    if laboratory := getattr(given, "laboratory", ""):
        return str(laboratory)
    round_id = str(getattr(given, "round", ""))
    if not round_id and route:
        row = pages.route(route)
        round_id = str(row["round"]) if row else ""
    row = pages.round(round_id) if round_id else None
    return str(row["laboratory"]) if row else ""
