"""The form of a correction: what it may send, what it shows, and which values differ."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

from marshmallow import Schema, fields, validate

from fieldapp import words
from fieldapp.commands import drawing, kitchen, last_use
from fieldapp.commands.correctable import HOWS, fields_for
from fieldapp.domain.facts import QuestionAnswered, WaterUsed
from fieldapp.domain.protocols.stations import asks
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import to_utc
from fieldapp.projections.pages import Pages
from fieldapp.web import said, spoken
from fieldapp.web.entry_words import HOWS as HOW_WORDS
from fieldapp.web.kitchen_forms import FOLD, LOCAL, TELLERS, fold_of
from fieldapp.web.story_lines import FIELDS

SHORT = validate.Length(max=120)


class CorrectForm(Schema):
    """The new values, each empty or as it was where nothing changes, and why."""

    reason = fields.String(
        load_default="",
        validate=validate.Length(max=500, error="Say it in at most 500 characters."),
    )
    done_local = fields.String(load_default="", validate=LOCAL)
    at_local = fields.String(load_default="", validate=LOCAL)
    to_local = fields.String(load_default="", validate=LOCAL)
    fold = fields.String(load_default="", validate=FOLD)
    fill = fields.String(validate=SHORT)
    volume_ml = fields.String(validate=SHORT)
    water_lot = fields.String(validate=SHORT)
    bottle = fields.String(validate=SHORT)
    answer = fields.String(validate=SHORT)
    note = fields.String(validate=validate.Length(max=500))
    how = fields.String(validate=SHORT)
    name = fields.String(validate=SHORT)
    why = fields.String(validate=SHORT)
    outcome = fields.String(validate=SHORT)
    laboratory_number = fields.String(validate=validate.Length(max=40))
    exact = fields.String(validate=SHORT)
    where = fields.String(validate=SHORT)
    known_by = fields.String(validate=SHORT)
    told_by = fields.String(validate=SHORT)


@dataclass(frozen=True, slots=True)
class Field:
    """One field of the form: a text, or a choice of ``(value, words)``."""

    name: str
    says: str
    value: str
    choices: tuple[tuple[str, str], ...] = ()
    kind: str = "text"


def shown_fields(pages: Pages, entry: Recorded, zone: str) -> list[Field]:
    """Return the fields by which an entry may be corrected, filled with what stands."""
    given = entry.fact
    if isinstance(given, WaterUsed):
        return _last_use(given, zone)
    found = []
    for name in fields_for(given.kind):
        if name == "water_lot" and not getattr(given, "water_lot", ""):
            continue
        choices = _choices(pages, entry, name)
        if name == "answer" and not choices:
            continue
        value = getattr(given, name, "")
        text = "" if name == "volume_ml" and not value else str(value)
        kind = "number" if name == "volume_ml" else "text"
        found.append(Field(name, _label(name), text, choices, kind))
    return found


def changes_of(pages: Pages, entry: Recorded, form: Mapping[str, Any], zone: str) -> dict[str, Any]:
    """Return the values of the form that are not those of the entry."""
    if isinstance(entry.fact, WaterUsed):
        return _use_changes(entry.fact, form, zone)
    changes: dict[str, Any] = {}
    for field in shown_fields(pages, entry, zone):
        given = str(form.get(field.name, field.value)).strip()
        if given != field.value:
            changes[field.name] = _typed(field.name, given)
    return changes


def done_at_of(entry: Recorded, form: Mapping[str, Any], zone: str) -> datetime | None:
    """Return the time that the form states, None where it is the one that stands, to the second.

    Raises:
        NoSuchLocalTime, AmbiguousLocalTime: The clocks changed in that hour.
    """
    given = str(form.get("done_local") or "")
    if not given or given in (local(entry.done_at, zone), local(entry.done_at, zone)[:-3]):
        return None
    return to_utc(given, zone, fold_of(form))


def local(at: datetime, zone: str) -> str:
    """Return an instant as a form's local time, to the second."""
    return f"{at.astimezone(ZoneInfo(zone)):%Y-%m-%dT%H:%M:%S}"


def _label(name: str) -> str:
    return words.gettext(FIELDS[name]).capitalize()


def _choices(pages: Pages, entry: Recorded, name: str) -> tuple[tuple[str, str], ...]:
    tables: Mapping[str, tuple[tuple[str, ...], Mapping[str, str]]] = {
        "fill": (drawing.FILLS, said.FILLS),
        "how": (HOWS, HOW_WORDS),
        "why": (kitchen.LEAVE_WHYS, spoken.WHYS),
        "outcome": (kitchen.OUTCOMES, spoken.OUTCOMES),
    }
    if name == "answer":
        return _answers(pages, entry)
    known, table = tables.get(name, ((), {}))
    return tuple((one, spoken.of(table, one)) for one in known)


def _answers(pages: Pages, entry: Recorded) -> tuple[tuple[str, str], ...]:
    given = entry.fact
    if not isinstance(given, QuestionAnswered):
        return ()
    row = pages.visit(given.visit)
    protocol = pages.protocol(row["sha256"]) if row else None
    ask = asks(protocol).get(given.question) if protocol else None
    if ask is None:
        return ()
    return tuple((one, words.gettext(ask.words.get(one, one))) for one in ask.answers)


def _typed(name: str, given: str) -> Any:
    if name != "volume_ml":
        return given
    if not given:
        return 0
    return int(given) if given.isdecimal() else given


def _last_use(given: WaterUsed, zone: str) -> list[Field]:
    choices = {
        "exact": tuple((one, spoken.of(spoken.EXACT, one)) for one in last_use.EXACT),
        "where": tuple((one, spoken.of(spoken.PLACES, one)) for one in last_use.WHERE),
        "known_by": tuple((one, spoken.of(spoken.KNOWN_BY, one)) for one in last_use.KNOWN_BY),
        "told_by": tuple((one, spoken.of(spoken.TELLERS, one)) for one in (*TELLERS, "sampler")),
    }
    times = _use_times(given, zone)
    return [
        Field("exact", _label("exact"), given.exact, choices["exact"]),
        Field("at_local", words.gettext("At, or between"), times[0], kind="time"),
        Field("to_local", words.gettext("and, if between two times"), times[1], kind="time"),
        Field("where", _label("where"), given.where, choices["where"]),
        Field("known_by", _label("known_by"), given.known_by, choices["known_by"]),
        Field("told_by", _label("told_by"), given.told_by, choices["told_by"]),
    ]


def _use_times(given: WaterUsed, zone: str) -> tuple[str, str]:
    """Return the local times as they were stated: of *about* its middle."""
    if given.exact == "unknown" or not given.from_:
        return "", ""
    first, last = (datetime.fromisoformat(one) for one in (given.from_, given.to))
    if given.exact == "about":
        return local(first + last_use.ABOUT, zone), ""
    return local(first, zone), local(last, zone) if given.exact == "between" else ""


def _use_changes(given: WaterUsed, form: Mapping[str, Any], zone: str) -> dict[str, Any]:
    """Return the statement anew where its times or its exactness changed, else what else did."""
    changes: dict[str, Any] = {
        name: form[name]
        for name in ("exact", "where", "known_by", "told_by")
        if name in form and form[name] != getattr(given, name)
    }
    names = ("at_local", "to_local")
    told = tuple(str(form.get(name) or "") for name in names)
    stood = _use_times(given, zone)
    if "exact" not in changes and all(map(_same_minute, told, stood)):
        return changes
    at, to = (to_utc(one, zone, fold_of(form)) if one else None for one in told)
    return {**changes, "exact": form.get("exact", given.exact), "at": at, "to": to}


def _same_minute(told: str, stood: str) -> bool:
    return told in (stood, stood[:-3] if stood else "")
