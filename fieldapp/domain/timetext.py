"""Moments and durations as text. Moments are UTC inside; a typed local time is checked first.

Python subtracts and compares two moments of one zone by their clock faces, ignoring the hour
that a clock change takes or gives. So everything here becomes UTC before it is reckoned with.
"""

import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Literal
from zoneinfo import ZoneInfo

from fieldapp.domain.errors import RuleBroken

HALF_HOUR = timedelta(minutes=30)

_UTC_TEXT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{3}Z", re.ASCII)
_LOCAL_TEXT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d(:\d\d)?", re.ASCII)
_DURATION = re.compile(
    r"P(?=.)(?:(?P<weeks>\d+)W)?(?:(?P<days>\d+)D)?"
    r"(?:T(?=.)(?:(?P<hours>\d+)H)?(?:(?P<minutes>\d+)M)?(?:(?P<seconds>\d+)S)?)?",
    re.ASCII,
)
_YEARS_OR_MONTHS = re.compile(r"P(?:\d+Y|(?:\d+[YWD])*\d+M)", re.ASCII)


class BadTime(RuleBroken):
    """A moment cannot be read; ``why`` is ``form`` or ``no-zone``, ``value`` the text."""

    kind = "bad-time"


class BadZone(RuleBroken):
    """``zone`` names no zone of the time-zone database."""

    kind = "bad-zone"


class BadDuration(RuleBroken):
    """A duration cannot be read; ``why`` is ``form`` or ``calendar`` (months differ in length)."""

    kind = "bad-duration"


class NoSuchLocalTime(RuleBroken):
    """The clocks went forward over ``local`` in ``zone``; no clock there ever showed it."""

    kind = "no-such-local-time"


class AmbiguousLocalTime(RuleBroken):
    """The clocks went back over ``local`` in ``zone``; ``first`` and ``second`` are UTC."""

    kind = "ambiguous-local-time"


@dataclass(frozen=True, slots=True)
class Chip:
    """One moment offered as an answer to "when was water last used?".

    ``local`` is the clock's face; ``fold`` is 1 for the second time a clock showed it; ``day``
    is in words unless it lies before yesterday.
    """

    at: datetime
    local: str
    fold: int
    day: Literal["today", "yesterday", "before"]


def in_utc(at: datetime) -> datetime:
    """Return ``at`` in UTC.

    Raises:
        BadTime: ``at`` has no zone; guessing the machine's would be a lie on another machine.
    """
    if at.utcoffset() is None:
        raise BadTime(value=at.isoformat(), why="no-zone")
    return at.astimezone(UTC)


def parse_utc(text: str) -> datetime:
    """Return the moment of ``2031-05-04T06:30:00.000Z``.

    Raises:
        BadTime: Any other form, however near.
    """
    if not _UTC_TEXT.fullmatch(text):
        raise BadTime(value=text, why="form")
    return _parsed(text)


def format_utc(at: datetime) -> str:
    """Return ``at`` as ``2031-05-04T06:30:00.000Z``; what is finer than 1 ms is cut off."""
    whole = in_utc(at)
    return f"{whole:%Y-%m-%dT%H:%M:%S}.{whole.microsecond // 1000:03d}Z".rjust(24, "0")


def zone_named(zone: str) -> ZoneInfo:
    """Return a zone of the time-zone database by its name, as ``America/Boise``.

    Raises:
        BadZone: There is none of that name.
    """
    try:
        return ZoneInfo(zone)
    except (KeyError, ValueError, OSError):
        raise BadZone(zone=zone) from None


def to_utc(local: str, zone: str, fold: int | None = None) -> datetime:
    """Return the moment at which clocks in ``zone`` showed ``local`` (``YYYY-MM-DDTHH:MM``).

    ``fold`` answers which of two moments is meant where clocks went back: 0 the first, 1 the
    second. Elsewhere it changes nothing.

    Raises:
        BadTime: ``local`` is not of that form, or no date.
        BadZone: ``zone`` is none.
        NoSuchLocalTime: No clock there showed it.
        AmbiguousLocalTime: Two moments answer, and ``fold`` does not say which.
    """
    where = zone_named(zone)
    if not _LOCAL_TEXT.fullmatch(local):
        raise BadTime(value=local, why="form")
    face = _parsed(local)
    first, second = (face.replace(tzinfo=where, fold=n).astimezone(UTC) for n in (0, 1))
    if first.astimezone(where).replace(tzinfo=None) != face:
        raise NoSuchLocalTime(local=local, zone=zone)
    if first == second:
        return first
    if fold is None:
        raise AmbiguousLocalTime(local=local, zone=zone, first=first, second=second)
    return second if fold else first


def parse_duration(text: str) -> timedelta:
    """Return the length of an ISO 8601 duration such as ``PT6H``, ``P14D`` or ``PT30M``.

    Raises:
        BadDuration: Another form, or years and months, which are of no fixed length.
    """
    if _YEARS_OR_MONTHS.match(text):
        raise BadDuration(value=text, why="calendar")
    found = _DURATION.fullmatch(text)
    if found is None:
        raise BadDuration(value=text, why="form")
    try:
        return timedelta(**{unit: int(n) for unit, n in found.groupdict(default="0").items()})
    except (OverflowError, ValueError):
        raise BadDuration(value=text, why="form") from None


def chips(
    now: datetime, zone: str, *, back: timedelta = timedelta(hours=12), step: timedelta = HALF_HOUR
) -> tuple[Chip, ...]:
    """Return the moments to offer for the last use of water, the latest first.

    They stand on the half hours of the clocks in ``zone``, from ``now`` to ``back`` before it.
    Stepping in UTC leaves out a face that no clock showed and gives a repeated one twice.
    """
    where = zone_named(zone)
    local = in_utc(now).astimezone(where)
    past = timedelta(minutes=local.minute, seconds=local.second, microseconds=local.microsecond)
    latest = in_utc(now) - past % step
    offered = (latest - n * step for n in range(back // step + 1))
    return tuple(_chip(at.astimezone(where), local) for at in offered)


def _chip(at: datetime, now: datetime) -> Chip:
    days = (now.date() - at.date()).days
    day: Literal["today", "yesterday", "before"] = "before"
    if days <= 1:
        day = "yesterday" if days else "today"
    return Chip(at.astimezone(UTC), f"{at:%Y-%m-%dT%H:%M}", at.fold, day)


def _parsed(text: str) -> datetime:
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        raise BadTime(value=text, why="form") from None
