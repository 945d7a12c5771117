"""What a changed round file changes of the round that stands (R20). Pure, over facts.

Nothing that was visited is removed or planned anew: such a difference is reported as kept.
"""

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import TypeVar

from fieldapp.domain.facts import (
    Fact,
    PersonListed,
    ProtocolKept,
    RoundChanged,
    RoundOpened,
    RoutePlanned,
    SiteDropped,
    SiteListed,
    VisitPlanned,
)
from fieldapp.domain.facts.base import private_fields

_K = TypeVar("_K")
_F = TypeVar("_F", bound=Fact)

NEVER_APPENDED = frozenset(
    {"site-kept", "route-kept", "visit-kept", "person-dropped", "route-dropped", "visit-dropped"}
)


@dataclass(frozen=True, slots=True)
class Change:
    """One difference: ``kind`` is what happened to ``about`` (``site:Q-0412``, ``visit:V-3``).

    ``before`` is the fact that stands, ``after`` the one that is to stand; a dropped site's is
    ``SiteDropped``. ``fields`` names what differs. A dropped visit, route or person has no fact
    of its own: ``before`` is what may be withdrawn. Of a site there is one change for the pool
    and one for each route it is on.
    """

    kind: str
    about: str
    before: Fact | None = None
    after: Fact | None = None
    fields: tuple[str, ...] = ()


def difference(
    standing: Iterable[Fact], new: Iterable[Fact], *, visited: frozenset[str] = frozenset()
) -> tuple[Change, ...]:
    """Return what turns the plan that stands into the new one, in an order fit to append.

    ``standing`` holds the living facts of the round, a later one replacing an earlier one of the
    same id; ``new`` those of the changed file. ``visited`` names the visits that were opened.
    """
    old, now = _Plan(standing), _Plan(new)
    return (
        *_protocols(old, now),
        *_round(old, now),
        *_people(old, now),
        *_sites(old, now, visited),
        *_routes(old, now, visited),
        *_visits(old, now, visited),
    )


def to_append(changes: Sequence[Change]) -> tuple[Fact, ...]:
    """Return the facts that the changes add to the record."""
    return tuple(c.after for c in changes if c.after is not None and c.kind not in NEVER_APPENDED)


class _Plan:
    """A plan's facts by id, the last of each."""

    def __init__(self, facts: Iterable[Fact]) -> None:
        self.round: RoundOpened | None = None
        self.protocols: dict[str, ProtocolKept] = {}
        self.people: dict[str, PersonListed] = {}
        self.sites: dict[tuple[str, str], SiteListed] = {}
        self.routes: dict[str, RoutePlanned] = {}
        self.visits: dict[str, VisitPlanned] = {}
        for fact in facts:
            self._take(fact)

    def _take(self, fact: Fact) -> None:
        if isinstance(fact, RoundOpened):
            self.round = fact
        elif isinstance(fact, ProtocolKept):
            self.protocols[fact.protocol] = fact
        elif isinstance(fact, PersonListed):
            self.people[fact.person] = fact
        elif isinstance(fact, SiteListed):
            self.sites[fact.site, fact.route] = fact
        elif isinstance(fact, SiteDropped):
            self._drop(fact.site)
        elif isinstance(fact, RoutePlanned):
            self.routes[fact.route] = fact
        elif isinstance(fact, VisitPlanned):
            self.visits[fact.visit] = fact

    def _drop(self, site: str) -> None:
        for key in [key for key in self.sites if key[0] == site]:
            del self.sites[key]

    def pool(self) -> dict[str, SiteListed]:
        """Return the sites that are in the pool."""
        return {site: listed for (site, route), listed in self.sites.items() if not route}


def _protocols(old: _Plan, now: _Plan) -> Iterable[Change]:
    for name, kept in now.protocols.items():
        before = old.protocols.get(name)
        if before is None:
            yield Change("protocol-added", f"protocol:{name}", None, kept)
        elif before.sha256 != kept.sha256:
            yield Change("protocol-changed", f"protocol:{name}", before, kept, ("sha256",))


def _round(old: _Plan, now: _Plan) -> Iterable[Change]:
    if old.round is None or now.round is None:
        return
    differs = _differs(old.round, now.round)
    if differs:
        values = {f.name: getattr(now.round, f.name) for f in fields(now.round)}
        about = f"round:{now.round.round}"
        yield Change("round-changed", about, old.round, RoundChanged(**values), differs)


def _people(old: _Plan, now: _Plan) -> Iterable[Change]:
    yield from _listed("person", old.people, now.people, str)
    for person, before in old.people.items():
        if person not in now.people:
            yield Change("person-dropped", f"person:{person}", before)


def _sites(old: _Plan, now: _Plan, visited: frozenset[str]) -> Iterable[Change]:
    yield from _listed("site", old.sites, now.sites, lambda key: key[0])
    seen = {visit.site for visit in old.visits.values() if visit.visit in visited}
    for site, before in old.pool().items():
        if (site, "") in now.sites:
            continue
        if site in seen:
            yield Change("site-kept", f"site:{site}", before)
        else:
            dropped = SiteDropped(site=site, round=before.round)
            yield Change("site-dropped", f"site:{site}", before, dropped)


def _routes(old: _Plan, now: _Plan, visited: frozenset[str]) -> Iterable[Change]:
    yield from _listed("route", old.routes, now.routes, str)
    walked = {visit.route for visit in old.visits.values() if visit.visit in visited}
    for route, before in old.routes.items():
        if route not in now.routes:
            kind = "route-kept" if route in walked else "route-dropped"
            yield Change(kind, f"route:{route}", before)


def _visits(old: _Plan, now: _Plan, visited: frozenset[str]) -> Iterable[Change]:
    for change in _listed("visit", old.visits, now.visits, str):
        visit = change.about.partition(":")[2]
        if visit not in visited or change.before is None:
            yield change
        elif set(change.fields) - {"position"}:
            # What was done stands by the plan under which it was done (R5: purpose is fixed).
            yield replace(change, kind="visit-kept")
    for visit, before in old.visits.items():
        if visit not in now.visits:
            kind = "visit-kept" if visit in visited else "visit-dropped"
            yield Change(kind, f"visit:{visit}", before)


def _listed(
    word: str, old: Mapping[_K, _F], now: Mapping[_K, _F], name: Callable[[_K], str]
) -> Iterable[Change]:
    for key, after in now.items():
        before = old.get(key)
        about = f"{word}:{name(key)}"
        if before is None:
            yield Change(f"{word}-added", about, None, after)
            continue
        differs = _differs(before, after)
        if differs:
            yield Change(f"{word}-changed", about, before, after, differs)


def _differs(before: Fact, after: Fact) -> tuple[str, ...]:
    """Name the fields that differ, as the entry's keys; lists and tuples are alike."""
    mine = {**before.data(), **before.private_part()}
    theirs = {**after.data(), **after.private_part()}
    names = [f.name.rstrip("_") for f in fields(after)]
    return tuple(name for name in names if mine.get(name) != theirs.get(name))


def is_private(change: Change, field: str) -> bool:
    """Say whether a field that differs is private, so that its text is not to be printed."""
    fact = change.after or change.before
    return fact is not None and field in private_fields(type(fact))
