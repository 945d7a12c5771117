"""Facts of the plan: rounds, sites, routes, visits, bottles, people and devices."""

from collections.abc import Mapping
from typing import Any

from fieldapp.domain.facts.base import ALL, ROUTE, ROUTE_LAB, Fact, fact, private


@fact("round.opened", place="plan", reach=ALL)
class RoundOpened(Fact):
    """One sampling campaign: one rule with its convention, a period, protocols, a laboratory.

    ``from_``/``to`` are ISO dates, ``months`` the months of the year in which draws count,
    ``due`` an ISO duration within which a filled bottle must be received,
    ``protocols`` maps a protocol's id to the SHA-256 of its text.
    """

    round: str
    title: str
    rule: str
    convention: str
    zone: str
    from_: str
    to: str
    months: tuple[int, ...]
    laboratory: str
    laboratory_title: str = ""
    due: str = ""
    keep_poured: bool = False
    protocols: Mapping[str, str]
    convention_by: str = ""


@fact("round.changed", place="plan", reach=ALL)
class RoundChanged(RoundOpened):
    """The round's own fields as they stand from now on; the earlier entry stays readable."""


@fact("protocol.kept", place="plan", reach=ALL)
class ProtocolKept(Fact):
    """The text of a protocol document, whole, under its SHA-256."""

    protocol: str
    sha256: str
    toml: str


@fact("person.listed", place="plan", reach=ALL)
class PersonListed(Fact):
    """Somebody who works in the round; the name is private."""

    person: str
    roles: tuple[str, ...]
    name: str = private()


@fact("site.listed", place="plan", reach=ROUTE)
class SiteListed(Fact):
    """A tap in the pool, under its pseudonymous code; ``route`` is empty for the pool alone."""

    site: str
    round: str
    route: str = ""
    tap: str
    tier: str
    line: str
    plumbing: str = ""
    name: str = private()
    address: str = private()
    phone: str = private()
    contact: str = private()
    access: str = private()


@fact("site.dropped", place="plan", reach=ROUTE)
class SiteDropped(Fact):
    """A site leaves the round; ``instead`` names the one that takes its place, if any."""

    site: str
    round: str
    instead: str = ""
    reason: str = private()


@fact("route.planned", place="plan", reach=ROUTE)
class RoutePlanned(Fact):
    """One sampler's visits for a day."""

    route: str
    round: str
    title: str
    day: str
    sampler: str


@fact("visit.planned", place="plan", reach=ROUTE_LAB)
class VisitPlanned(Fact):
    """What is to be done at one tap: protocol by id and SHA-256, draws with their purpose.

    ``draws`` holds mappings with ``draw`` (1, 2, …), ``purpose`` and, for a field blank or a
    duplicate, ``kind``. ``position`` is the place in the route's own order.
    """

    visit: str
    round: str
    route: str
    site: str
    tap: str
    protocol: str
    sha256: str
    draws: tuple[Mapping[str, Any], ...]
    position: int = 0
    answers: Mapping[str, Any] | None = None


@fact("bottle.issued", place="plan", reach=ROUTE_LAB)
class BottleIssued(Fact):
    """A code for one bottle, before it is on paper; a spare has no visit and no draw."""

    bottle: str
    round: str
    route: str
    visit: str = ""
    draw: int = 0
    kind_: str = ""
    purpose: str = ""
    volume_ml: int = 0
    analyse: tuple[str, ...] = ()
    preservative: str = "none"


@fact("labels.printed", place="plan", reach=ROUTE_LAB)
class LabelsPrinted(Fact):
    """Labels went to paper; ``copy`` is 1 for the first print, 2 for a reprint."""

    route: str
    bottles: tuple[str, ...]
    copy: int


@fact("bottle.voided", place="plan", reach=ROUTE_LAB)
class BottleVoided(Fact):
    """A code that will hold no water: broken, lost, replaced."""

    bottle: str
    why: str


@fact("device.enrolled", place="plan", reach=ALL)
class DeviceEnrolled(Fact):
    """A device's key is known from now on, and who carries the device."""

    dev: str
    public_key: str
    places: tuple[str, ...]
    person: str = ""
    laboratory: str = ""


@fact("device.granted", place="plan", reach=ALL)
class DeviceGranted(Fact):
    """A device may pull the entries under a scope word."""

    dev: str
    scope: str
