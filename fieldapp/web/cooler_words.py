"""What the counter says of a cooler: its name, what was read, what agrees, what is missing."""

from datetime import date
from typing import Any
from zoneinfo import ZoneInfo

from fieldapp import words
from fieldapp.domain.custody import same_seals
from fieldapp.projections.arrivals import Arrival
from fieldapp.web import shown
from fieldapp.web.context import pages, reading

FULL_DAYS = (
    words.N_("Monday"), words.N_("Tuesday"), words.N_("Wednesday"), words.N_("Thursday"),
    words.N_("Friday"), words.N_("Saturday"), words.N_("Sunday"),
)  # fmt: skip
DAYS_BY_NAME_ALONE = 6
"""A cooler older than this many days is named with its date, or Tuesday would mean two."""


def title(cooler: Arrival, zone: str) -> str:
    """Return the name of a cooler, as *Cooler 3, Tuesday*; never a seal."""
    if not cooler.recorded or not cooler.day:
        return words.gettext("Cooler without our record")
    on, now = date.fromisoformat(cooler.day), reading().at.astimezone(ZoneInfo(zone)).date()
    near = 0 <= (now - on).days <= DAYS_BY_NAME_ALONE
    day = words.gettext(FULL_DAYS[on.weekday()]) if near else shown.full_day(on)
    return words.gettext("Cooler {box}, {day}").format(box=cooler.box or cooler.cooler, day=day)


def told(cooler: Arrival, zone: str) -> dict[str, Any]:
    """Return all that the counter shows of one open cooler."""
    opened = cooler.opened
    received = set(cooler.received)
    missing = [code for code in cooler.packed if code not in received]
    gone = [row for code in missing if (row := pages().bottle(code)) is not None]
    aside = [one for one in cooler.receipts if "cooler" in (getattr(one.fact, "checks", {}) or {})]
    return {
        "id": cooler.cooler,
        "arrival": cooler,
        "title": title(cooler, zone),
        "in": len(received),
        "of": cooler.expected,
        "missing": sorted(gone, key=lambda row: (row["site"], row["draw"], row["bottle"])),
        "strays": len(aside),
        "says": comparisons(cooler) if opened else [],
        "uncounted": opened.count - len(received) if opened else 0,
    }


def comparisons(cooler: Arrival) -> list[tuple[str, str]]:
    """Return what was read against what the record says: a tone (good, warn, quiet) and words."""
    opened = cooler.opened
    if opened is None:
        return []
    if not cooler.recorded:
        says = words.gettext(
            "No record of this cooler is here. Its bottles are received all the same."
        )
        return [("quiet", says), *_only_seen(cooler)]
    return [_seals(cooler), _counts(cooler)]


def _only_seen(cooler: Arrival) -> list[tuple[str, str]]:
    opened = cooler.opened
    assert opened is not None
    tone = "quiet" if opened.whole else "warn"
    counted = words.ngettext("{n} bottle counted.", "{n} bottles counted.", opened.count)
    return [(tone, _seal_read(cooler)), ("quiet", counted.format(n=opened.count))]


def _seals(cooler: Arrival) -> tuple[str, str]:
    opened = cooler.opened
    assert opened is not None
    if not cooler.seals:
        return "warn", words.gettext("{read} The record names no seal.").format(
            read=_seal_read(cooler)
        )
    if same_seals(opened.seal_read, cooler.seals):
        return ("good" if opened.whole else "warn"), words.gettext("{read} It agrees.").format(
            read=_seal_read(cooler)
        )
    return "stop", words.gettext("{read} Put on was {seals}. The Desk sees it.").format(
        read=_seal_read(cooler), seals=", ".join(cooler.seals)
    )


def _seal_read(cooler: Arrival) -> str:
    opened = cooler.opened
    assert opened is not None
    if not opened.seal_read:
        return words.gettext("No seal was on it.")
    seals = ", ".join(opened.seal_read)
    whole = words.gettext("Seal {seals}, whole.")
    broken = words.gettext("Seal {seals}, broken.")
    return (whole if opened.whole else broken).format(seals=seals)


def _counts(cooler: Arrival) -> tuple[str, str]:
    opened = cooler.opened
    assert opened is not None
    packed = len(cooler.packed)
    if opened.count == packed:
        return "good", words.gettext("{n} counted, {n} packed. It agrees.").format(n=packed)
    return "stop", words.gettext("{n} counted, {packed} packed. The Desk sees it.").format(
        n=opened.count, packed=packed
    )
