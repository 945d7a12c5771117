"""How pages name a cooler and say where it is: by box and day, never by its seal."""

from collections.abc import Mapping
from datetime import date, datetime
from typing import Any
from zoneinfo import ZoneInfo

from fieldapp import words
from fieldapp.words import N_
from fieldapp.words.days import WEEKDAYS

A_WEEK = 6
"""So many days a weekday's name says enough; then the date stands beside it."""

STATES = {
    "packing": N_("open, being packed"),
    "reopened": N_("open, seal broken"),
    "sealed": N_("sealed"),
    "relinquished": N_("handed over"),
    "received": N_("at the laboratory"),
}

TO = {
    "laboratory": N_("the laboratory"),
    "courier": N_("a courier"),
    "night-box": N_("the night box"),
    "colleague": N_("a colleague"),
}

TO_SHORT = {
    "laboratory": N_("Laboratory"),
    "courier": N_("Courier"),
    "night-box": N_("Night box"),
    "colleague": N_("Colleague"),
}
"""The same on a button."""

WHEREABOUTS = {
    "with-me": N_("In the crate, for the next cooler"),
    "left-behind": N_("Left behind"),
    "broken": N_("Broken"),
    "elsewhere": N_("Somewhere else"),
}


def title(cooler: Mapping[str, Any], now: datetime, zone: str = "UTC") -> str:
    """Return a cooler's name, ``Cooler 3, Tuesday``; one of long ago with its date."""
    name = words.gettext("Cooler {box}").format(box=cooler["box"] or cooler["cooler"])
    if not cooler["day"]:
        return name
    day = date.fromisoformat(cooler["day"])
    weekday = words.gettext(WEEKDAYS[day.weekday()])
    today = now.astimezone(ZoneInfo(zone or "UTC")).date()
    if abs((today - day).days) <= A_WEEK:
        return f"{name}, {weekday}"
    return f"{name}, {weekday} {day.isoformat()}"
