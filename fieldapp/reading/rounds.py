"""Round files: one sampling campaign with its people, sites and routes, as JSON.

The keys ``name``, ``address``, ``phone``, ``contact`` and ``access`` hold private text of people
and sites and nothing else; all other things have ``id`` and ``title``. Unknown keys are left out
with a note. A ``rehearsal`` block is no part of the plan and is not read here.
"""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date

from fieldapp.domain import protocols as documents
from fieldapp.domain.facts import (
    Fact,
    PersonListed,
    ProtocolKept,
    RoundOpened,
    RoutePlanned,
    SiteListed,
    VisitPlanned,
)
from fieldapp.domain.protocols import Protocol
from fieldapp.reading.draws import read_draws
from fieldapp.reading.faults import Findings, Note
from fieldapp.reading.header import iso, read_header, window
from fieldapp.reading.part import Part, read_json

ROLES = ("sampler", "clerk", "coordinator")
# Tiers of a site pool by 40 CFR 141.86(a); 5 is a representative site, where a rule numbers it
# so. "none" is a tap outside the pool, such as a resident's who asked. From memory, check.
TIERS = ("1", "2", "3", "4", "5", "none")
# Materials of a service line; our words. A rule tells lead lines from others by them.
LINES = (
    "lead",
    "part lead",
    "galvanised",
    "copper",
    "iron",
    "plastic",
    "other",
    "non-lead",
    "unknown",
)
# Materials of the plumbing inside; our words.
PLUMBING = (
    "lead",
    "copper",
    "copper with lead solder",
    "galvanised",
    "plastic",
    "steel",
    "mixed",
    "other",
    "unknown",
)
PRIVATE = ("name", "address", "phone", "contact", "access")


@dataclass(frozen=True, slots=True)
class RoundFile:
    """A round as its file plans it, as facts; ``notes`` is worth knowing and stops nothing.

    ``sites`` holds each site for the pool (no route) and once more for each route it is on.
    """

    file: str
    sha256: str
    round: RoundOpened
    protocols: tuple[ProtocolKept, ...]
    people: tuple[PersonListed, ...]
    sites: tuple[SiteListed, ...]
    routes: tuple[RoutePlanned, ...]
    visits: tuple[VisitPlanned, ...]
    notes: tuple[Note, ...] = ()

    @property
    def facts(self) -> tuple[Fact, ...]:
        """Every fact in the order in which they refer to each other."""
        return (
            *self.protocols,
            self.round,
            *self.people,
            *self.sites,
            *self.routes,
            *self.visits,
        )


def read_round(
    data: bytes, path_name: str, *, protocols: Mapping[str, Protocol] | None = None
) -> RoundFile:
    """Return the round that a file plans.

    ``protocols`` are the documents that a visit may name, those shipped where none are given.

    Raises:
        BadFile: With every fault of the file; then nothing of it is to be used.
    """
    findings = Findings(path_name)
    whole = read_json(data, findings)
    if whole is None:
        findings.settle()
        raise AssertionError("unreadable without a fault")
    known = documents.shipped() if protocols is None else protocols
    read = _Reading(whole, known)
    findings.settle()
    return RoundFile(
        file=findings.file,
        sha256=hashlib.sha256(data).hexdigest(),
        round=replace(read.round, protocols={p.protocol: p.sha256 for p in read.kept()}),
        protocols=read.kept(),
        people=tuple(read.people.values()),
        sites=(*read.sites.values(), *read.on_routes),
        routes=tuple(read.routes.values()),
        visits=tuple(read.visits.values()),
        notes=tuple(findings.notes),
    )


class _Reading:
    """What has been read so far, by id, so that what follows can refer to it."""

    def __init__(self, whole: Part, known: Mapping[str, Protocol]) -> None:
        whole.only("round", "people", "sites", "routes", "rehearsal")
        self.known = known
        self.used: dict[str, Protocol] = {}
        self.people: dict[str, PersonListed] = {}
        self.sites: dict[str, SiteListed] = {}
        self.routes: dict[str, RoutePlanned] = {}
        self.visits: dict[str, VisitPlanned] = {}
        self.on_routes: list[SiteListed] = []
        self._taken: dict[tuple[str, str], str] = {}
        self.header = read_header(whole.block("round"))
        self.round = self.header.round
        for part in whole.blocks("people"):
            self._person(part)
        for part in whole.blocks("sites"):
            self._site(part)
        for part in whole.blocks("routes"):
            self._route(part)

    def kept(self) -> tuple[ProtocolKept, ...]:
        """Return the text of each protocol that a visit names."""
        return tuple(
            ProtocolKept(protocol=p.id, sha256=p.sha256, toml=p.toml) for p in self.used.values()
        )

    def _person(self, part: Part) -> None:
        part.only("id", "roles", "name")
        person = PersonListed(
            person=part.id("id"),
            roles=part.words("roles", ROLES),
            name=part.text("name", optional=True, private=True),
        )
        if self._new(part, "people", person.person):
            self.people[person.person] = person

    def _site(self, part: Part) -> None:
        part.only("id", "tap", "tier", "line", "plumbing", *PRIVATE)
        site = SiteListed(
            site=part.id("id"),
            round=self.round.round,
            tap=part.text("tap"),
            tier=part.word("tier", TIERS),
            line=part.word("line", LINES),
            plumbing=part.word("plumbing", PLUMBING),
            **{key: part.text(key, optional=True, private=True) for key in PRIVATE},
        )
        if self._new(part, "sites", site.site):
            self.sites[site.site] = site

    def _route(self, part: Part) -> None:
        part.only("id", "title", "day", "sampler", "visits")
        day = part.day("day")
        route = RoutePlanned(
            route=part.id("id"),
            round=self.round.round,
            title=part.text("title"),
            day=iso(day),
            sampler=self._sampler(part),
        )
        self._check_day(part, day)
        if self._new(part, "routes", route.route):
            self.routes[route.route] = route
        before = len(self.visits)
        for position, visit in enumerate(part.blocks("visits"), start=1):
            self._visit(visit, route, day, position)
        planned = list(self.visits.values())[before:]
        self._list_on(route, planned)
        if part.value.get("visits") == []:
            part.note("route-empty", "visits", route.route)

    def _visit(self, part: Part, route: RoutePlanned, day: date | None, position: int) -> None:
        part.only("id", "site", "protocol", "draws")
        name = part.word("protocol", tuple(self.known), "no-protocol")
        protocol = self.known.get(name)
        site = self._listed(part, "site", "sites", self.sites)
        draws = read_draws(part, protocol, keep_poured=self.round.keep_poured)
        visit = VisitPlanned(
            visit=part.id("id"),
            round=self.round.round,
            route=route.route,
            site=site,
            tap=self.sites[site].tap if site in self.sites else "",
            protocol=name,
            sha256=protocol.sha256 if protocol else "",
            draws=draws,
            position=position,
        )
        if self._new(part, "visits", visit.visit):
            self.visits[visit.visit] = visit
        if protocol:
            self.used.setdefault(name, protocol)
            _note_protocol(part, protocol, day)

    def _list_on(self, route: RoutePlanned, planned: Sequence[VisitPlanned]) -> None:
        for site in dict.fromkeys(visit.site for visit in planned):
            if site in self.sites:
                self.on_routes.append(replace(self.sites[site], route=route.route))

    def _sampler(self, part: Part) -> str:
        sampler = self._listed(part, "sampler", "people", self.people)
        listed = self.people.get(sampler)
        if listed and listed.roles and "sampler" not in listed.roles:
            part.fault("not-a-sampler", "sampler", sampler)
        return sampler

    def _listed(self, part: Part, key: str, among: str, listed: Mapping[str, Fact]) -> str:
        name = part.id(key)
        # Where nothing could be listed, that fault stands already.
        if name and (among, name.casefold()) not in self._taken:
            part.fault("not-listed", key, name, list=among)
            return ""
        return name if name in listed else ""

    def _check_day(self, part: Part, day: date | None) -> None:
        first, last = self.header.first, self.header.last
        if not (day and first and last):
            return
        if not first <= day <= last:
            part.fault("day-outside", "day", day, first=first, last=last)
        elif self.round.months and day.month not in self.round.months:
            part.note("month-not-counted", "day", day, right=self.round.months)

    def _new(self, part: Part, among: str, name: str) -> bool:
        """Say whether the id is free; ids that differ in case alone read as one on paper."""
        if not name:
            return False
        first = self._taken.setdefault((among, name.casefold()), part.path)
        if first != part.path:
            part.fault("id-twice", "id", name, first=first)
        return first == part.path


def _note_protocol(part: Part, protocol: Protocol, day: date | None) -> None:
    if day and not protocol.in_force_on(day):
        within = window(protocol.in_force_from, protocol.in_force_to)
        part.findings.note(
            "protocol-outside-in-force", "", protocol.id, values={"day": day, **within}
        )
