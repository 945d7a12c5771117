"""How times, lengths, codes and volumes are shown on pages."""

from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

from fieldapp.domain import codes
from fieldapp.words import gettext as _

DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
MONTHS = (
    "Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec",
)  # fmt: skip


def instant(at: datetime | str | None) -> datetime | None:
    """Return the instant of ledger text or an aware datetime; nothing for nothing."""
    if not at:
        return None
    return (datetime.fromisoformat(at) if isinstance(at, str) else at).astimezone(UTC)


def clock(
    at: datetime | str | None, zone: str = "UTC", now: datetime | None = None, seconds: bool = False
) -> str:
    """Return the local time in the zone, with the day when it is not today's."""
    found = instant(at)
    if found is None:
        return ""
    here = found.astimezone(ZoneInfo(zone or "UTC"))
    shown = here.strftime("%H:%M:%S" if seconds else "%H:%M")
    today = now.astimezone(ZoneInfo(zone or "UTC")).date() if now else None
    return shown if here.date() == today else f"{day(here.date())} {shown}"


def day(given: date | str) -> str:
    """Return a day in words: ``Tue 4 May``, with the year where it is not far from plain."""
    found = date.fromisoformat(given) if isinstance(given, str) else given
    return f"{_(DAYS[found.weekday()])} {found.day} {_(MONTHS[found.month - 1])}"


def full_day(given: date | str) -> str:
    """Return a day with its year."""
    found = date.fromisoformat(given) if isinstance(given, str) else given
    return f"{day(found)} {found.year}"


def hours(length: timedelta | int | float | None) -> str:
    """Return a length of time as ``5 h 10``, below an hour as ``41 min``; rounded down."""
    if length is None:
        return ""
    seconds = length.total_seconds() if isinstance(length, timedelta) else float(length)
    minutes = int(seconds // 60)
    if minutes < 60:
        return f"{minutes} min"
    return f"{minutes // 60} h {minutes % 60:02d}"


def face(length: timedelta) -> str:
    """Return a length as the face of a countdown, ``0:41`` or ``0:41:07`` under ten minutes."""
    seconds = max(0, int(-(-length.total_seconds() // 1)))
    if seconds < 600:
        return f"{seconds // 60}:{seconds % 60:02d}"
    return f"{seconds // 3600}:{seconds // 60 % 60:02d}"


def code(given: str) -> str:
    """Return a bottle code in groups."""
    return codes.grouped(given)


def ml(volume: int) -> str:
    """Return a volume in millilitres with a thin space between thousands."""
    return f"{volume:,}".replace(",", "\u202f") + " mL"
