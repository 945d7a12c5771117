"""The last use of water as a statement: by whom, how exact, where in the house (R4)."""

from datetime import datetime, timedelta

from fieldapp.commands.asked import (
    Asked,
    NotStarted,
    NotYet,
    not_past,
    one_of,
    refuse,
    standing_of,
)
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import Fact, WaterUsed
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc

EXACT = ("at", "about", "between", "unknown")
KNOWN_BY = ("stated", "seen", "metered")
WHERE = ("this-tap", "kitchen", "bath", "toilet", "laundry", "outside", "elsewhere", "unsaid")
ABOUT = timedelta(minutes=15)
"""What "about" gives and takes on either side. Our choice: half the distance of two chips."""


class CrossedTimes(RuleBroken):
    """The last use is put between two times of which the first is the later."""

    kind = "crossed-times"


class NothingSaid(RuleBroken):
    """A statement of last use without a time that does not say "unknown"."""

    kind = "nothing-said"


def bounds(
    exact: str, at: datetime | None, to: datetime | None, reading: Reading
) -> tuple[datetime, datetime] | None:
    """Return between which moments water last ran, None where nobody knows.

    "About" gives and takes a quarter of an hour, but never later than now.

    Raises:
        NothingSaid: A time is missing.
        CrossedTimes: The second is earlier than the first.
        NotYet: It lies ahead.
    """
    one_of(exact, EXACT)
    if exact == "unknown":
        return None
    if at is None or (exact == "between" and to is None):
        raise NothingSaid()
    first = at - ABOUT if exact == "about" else at
    last = {"at": at, "about": at + ABOUT}.get(exact, to or at)
    if not_past(to or at, reading):
        raise NotYet(stated=format_utc(to or at))
    if last < first:
        raise CrossedTimes()
    return first, max(first, min(last, reading.at))


def state_last_use(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    exact: str,
    at: datetime | None = None,
    to: datetime | None = None,
    where: str = "unsaid",
    told_by: str = "resident",
    known_by: str = "stated",
    again: bool = False,
) -> list[Fact]:
    """Record when water last ran as a statement (R4); ``again``: it ran once more, at any step."""
    one_of(where, WHERE)
    one_of(known_by, KNOWN_BY)
    told = standing_of(pages, visit, reading)
    if again and told.state == "planned":
        raise NotStarted(visit=visit)
    if not again and told.due.kind != "last-use":
        refuse(pages, visit, told, WaterUsed)
    limits = bounds(exact, at, to, reading)
    first, last = (format_utc(one) for one in limits) if limits else ("", "")
    used = WaterUsed(
        visit=visit,
        from_=first,
        to=last,
        exact=exact,
        where=where,
        known_by=known_by,
        told_by=told_by if known_by == "stated" else "",
    )
    return [used]
