"""Facts of the Kitchen: what the sampler did and was told at one tap."""

from typing import Any

from fieldapp.domain.facts.base import ROUTE, ROUTE_LAB, Done, fact, private


@fact("visit.opened", place="kitchen", reach=ROUTE)
class VisitOpened(Done):
    """The sampler is at the door and begins."""

    visit: str


@fact("visit.left", place="kitchen", reach=ROUTE)
class VisitLeft(Done):
    """The sampler leaves; ``why`` is a kind (``waiting``, ``nobody-home`` …)."""

    visit: str
    why: str
    reason: str = private()


@fact("visit.resumed", place="kitchen", reach=ROUTE)
class VisitResumed(Done):
    """The sampler is back in the same visit."""

    visit: str


@fact("occupant.agreed", place="kitchen", reach=ROUTE)
class OccupantAgreed(Done):
    """Somebody of the household agrees; ``how`` is ``spoken``, ``signed`` or ``refused``."""

    visit: str
    how: str
    name: str = private()


@fact("question.answered", place="kitchen", reach=ROUTE_LAB)
class QuestionAnswered(Done):
    """One answer to one question of the protocol; both are the document's own words."""

    visit: str
    question: str
    answer: str
    note: str = private()


@fact("water.used", place="kitchen", reach=ROUTE_LAB)
class WaterUsed(Done):
    """The last use of water as a statement (R4), bounds in UTC text.

    ``exact`` is ``at``, ``about``, ``between`` or ``unknown``; ``where`` the place in the house;
    ``known_by`` is ``seen``, ``stated`` or ``metered``. Unknown has both bounds empty.
    """

    visit: str
    from_: str
    to: str
    exact: str
    where: str
    known_by: str = "stated"


@fact("stand.started", place="kitchen", reach=ROUTE_LAB)
class StandStarted(Done):
    """The sampler shut the last tap: water stands from this press on, measured here."""

    visit: str


@fact("run.started", place="kitchen", reach=ROUTE_LAB)
class RunStarted(Done):
    """The tap runs to waste, as a step asks."""

    visit: str
    step: str


@fact("run.ended", place="kitchen", reach=ROUTE_LAB)
class RunEnded(Done):
    """The run to waste is over."""

    visit: str
    step: str


@fact("bottle.set", place="kitchen", reach=ROUTE_LAB)
class BottleSet(Done):
    """A bottle was scanned and stood in its place in the order; binds a spare.

    ``held`` is ``known`` or, for a code this device had not heard of, ``unknown`` (R15).
    """

    visit: str
    bottle: str
    draw: int
    kind_: str
    purpose: str
    held: str = "known"


@fact("tap.opened", place="kitchen", reach=ROUTE_LAB)
class TapOpened(Done):
    """The tap was opened for draws that run on (R2)."""

    visit: str
    draws: tuple[int, ...]


@fact("tap.closed", place="kitchen", reach=ROUTE_LAB)
class TapClosed(Done):
    """The tap was closed after draws that run on."""

    visit: str
    draws: tuple[int, ...]


@fact("bottle.filled", place="kitchen", reach=ROUTE_LAB)
class BottleFilled(Done):
    """One filling. ``fill`` is ``line``, ``below``, ``over`` or ``spilled`` (R21).

    ``volume_ml`` only where somebody measured; ``water_lot`` for a blank.
    """

    visit: str
    bottle: str
    draw: int
    fill: str
    who_drew: str = "sampler"
    volume_ml: int = 0
    water_lot: str = ""


@fact("draw.poured", place="kitchen", reach=ROUTE_LAB)
class DrawPoured(Done):
    """A litre of the run was caught in order and poured away, as planned (R3)."""

    visit: str
    draw: int
    fill: str


@fact("deviation.stated", place="kitchen", reach=ROUTE_LAB)
class DeviationStated(Done):
    """Something was not done as the protocol says; ``deviation`` is a kind with a bias."""

    visit: str
    step: str
    deviation: str
    draws: tuple[int, ...] = ()
    reason: str = private()


@fact("visit.signed", place="kitchen", reach=ROUTE)
class VisitSigned(Done):
    """The sampler or the resident signs; ``how`` is ``typed`` or ``drawn``."""

    visit: str
    who: str
    how: str
    name: str = private()


@fact("visit.closed", place="kitchen", reach=ROUTE_LAB)
class VisitClosed(Done):
    """The visit is over; ``outcome`` is ``done``, ``refused``, ``nobody-home``, ``unfit`` …"""

    visit: str
    outcome: str


@fact("photo.taken", place="kitchen", reach=ROUTE)
class PhotoTaken(Done):
    """A photo note. ``about`` is a subject (``visit:…``, ``bottle:…``, ``entry:…``, ``cooler:…``).

    ``photo`` is the SHA-256 of the picture as kept, ``n`` its bytes, ``media`` its type; the
    store repeats them in the entry's ``blobs``, by which sync fetches the picture.
    """

    about: str
    photo: str
    n: int
    media: str
    visit: str = ""
    route: str = ""
    caption: str = private()

    def subjects(self) -> tuple[str, ...]:
        """Return the visit, and what the picture is of."""
        return tuple(dict.fromkeys((*super().subjects(), self.about)))

    def blobs(self) -> tuple[dict[str, Any], ...]:
        """Return the picture as an entry names it."""
        return ({"h": self.photo, "n": self.n, "t": self.media},)
