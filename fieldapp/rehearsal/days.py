"""Round files moved to other days: the demo's route is always of this very day."""

import json
from collections.abc import Mapping
from datetime import date, timedelta
from typing import Any

Plan = dict[str, Any]


def on_day(plan: Mapping[str, Any], day: date) -> Plan:
    """Return a round file's content moved so that its first route is of that day."""
    first = min(date.fromisoformat(route["day"]) for route in plan["routes"])
    return moved(plan, (day - first).days)


def moved(plan: Mapping[str, Any], days: int) -> Plan:
    """Return a round file's content with all its days moved.

    Its months become those that the moved period touches: a period that is moved out of the
    months a rule allows would count nothing.
    """
    copy: Plan = json.loads(json.dumps(plan))
    header = copy["round"]
    for key in ("from", "to"):
        header[key] = _later(header[key], days)
    header["months"] = _months(header["from"], header["to"])
    for route in copy["routes"]:
        route["day"] = _later(route["day"], days)
    for report in copy.get("rehearsal", {}).get("reports", ()):
        report["analysed_at"] = _later(report["analysed_at"], days)
    return copy


def as_file(plan: Mapping[str, Any]) -> bytes:
    """Return the content as the bytes of a round file."""
    return json.dumps(plan, ensure_ascii=False, indent=1).encode()


def _later(day: str, days: int) -> str:
    return (date.fromisoformat(day) + timedelta(days=days)).isoformat()


def _months(first: str, last: str) -> list[int]:
    day, end = date.fromisoformat(first), date.fromisoformat(last)
    months = set()
    while day <= end:
        months.add(day.month)
        day = (day.replace(day=1) + timedelta(days=32)).replace(day=1)
    return sorted(months)
