"""Enrolling devices: a one-time code becomes a known key and what that device may pull."""

from collections.abc import Sequence

from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import DeviceEnrolled, DeviceGranted, Fact
from fieldapp.projections.pages import Pages

PLACES_OF = {"sampler": "kitchen", "clerk": "bench", "coordinator": "desk"}


class NoSuchPerson(RuleBroken):
    """A name that no imported round lists."""

    kind = "no-such-person"


def places_of(pages: Pages, person: str) -> tuple[str, ...]:
    """Return the places that person's roles open on a device.

    Raises:
        NoSuchPerson: nobody of that id is listed.
    """
    row = pages.person(person)
    if row is None:
        known = ", ".join(p["person"] for p in pages.people()) or "nobody yet; import a round first"
        raise NoSuchPerson(person=person, known=known)
    return tuple(PLACES_OF[role] for role in row["roles"] if role in PLACES_OF)


def enrol_device(
    pages: Pages, *, dev: str, public_key: str, person: str, places: Sequence[str]
) -> list[Fact]:
    """Return the enrolment of a device and its grants: its person's routes, its laboratory.

    Every enrolled device pulls ``all``; a Bench-only one ``lab:L`` without private parts.
    """
    laboratories = [row["laboratory"] for row in pages.rounds()] if "bench" in places else []
    laboratory = laboratories[0] if laboratories else ""
    facts: list[Fact] = [
        DeviceEnrolled(
            dev=dev,
            public_key=public_key,
            places=tuple(places),
            person=person,
            laboratory=laboratory,
        )
    ]
    routes = [row["route"] for row in pages.routes() if row["sampler"] == person]
    facts += [DeviceGranted(dev=dev, scope=f"route:{route}") for route in routes]
    facts += [DeviceGranted(dev=dev, scope=f"lab:{name}") for name in dict.fromkeys(laboratories)]
    return facts
