"""What the Kitchen's forms may send, and how a typed local time becomes an instant."""

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from marshmallow import Schema, ValidationError, fields, validate, validates

from fieldapp.commands import drawing, kitchen, last_use
from fieldapp.commands.asked import NOW, When, stated_at
from fieldapp.domain.timetext import to_utc
from fieldapp.web.context import BadForm

LOCAL = validate.Regexp(
    r"^$|^\d{4}-\d\d-\d\dT\d\d:\d\d(:\d\d)?$", error="Type a date and a time, as 2031-05-04T06:30."
)
FOLD = validate.OneOf(("", "0", "1"), error="Say which of the two times: the first or the second.")
TELLERS = ("", "resident", "colleague", "caretaker", "neighbour")
NOTE = validate.Length(max=500, error="Say it in at most 500 characters.")
MOST_ML = 20_000
MOST_CRATE = 500


class WhenForm(Schema):
    """Every act of a person: when it was done and on whose word, empty for now."""

    done_local = fields.String(load_default="", validate=LOCAL)
    fold = fields.String(load_default="", validate=FOLD)
    told_by = fields.String(load_default="", validate=validate.OneOf(TELLERS))


class LeaveForm(WhenForm):
    """Why the sampler leaves."""

    why = fields.String(
        required=True, validate=validate.OneOf(kitchen.LEAVE_WHYS, error="Choose a reason.")
    )
    reason = fields.String(load_default="", validate=NOTE)
    go = fields.String(load_default="", validate=validate.Length(max=80))


class AnswerForm(WhenForm):
    """One answer to one question."""

    question = fields.String(required=True, validate=validate.Length(min=1, max=40))
    answer = fields.String(required=True, validate=validate.Length(min=1, max=40))
    note = fields.String(load_default="", validate=NOTE)


class LastUseForm(Schema):
    """When water last ran: a chip, or typed local times."""

    exact = fields.String(
        load_default="about", validate=validate.OneOf(last_use.EXACT, error="Choose how exact.")
    )
    at = fields.String(load_default="")
    to = fields.String(load_default="")
    at_local = fields.String(load_default="", validate=LOCAL)
    to_local = fields.String(load_default="", validate=LOCAL)
    fold = fields.String(load_default="", validate=FOLD)
    where = fields.String(load_default="unsaid", validate=validate.OneOf(last_use.WHERE))
    told_by = fields.String(load_default="resident", validate=validate.OneOf(TELLERS))
    known_by = fields.String(load_default="stated", validate=validate.OneOf(last_use.KNOWN_BY))
    again = fields.String(load_default="", validate=validate.OneOf(("", "yes")))
    said = fields.String(load_default="", validate=validate.OneOf(("", "yes")))

    @validates("at", "to")
    def check_instant(self, value: str, data_key: str) -> None:
        """Take only an instant with its zone, as the chips send it."""
        try:
            aware = not value or datetime.fromisoformat(value).utcoffset() is not None
        except ValueError:
            aware = False
        if not aware:
            raise ValidationError("Choose one of the times shown, or type one below.")


class SetForm(WhenForm):
    """A scanned or typed bottle code."""

    code = fields.String(
        required=True, validate=validate.Length(min=1, max=60, error="Scan or type the code.")
    )


class FillForm(WhenForm):
    """How full the bottle is; in a run each draw has its own ``fill_n`` and ``ml_n``."""

    fill = fields.String(
        load_default="line", validate=validate.OneOf(drawing.FILLS, error="Say how full it is.")
    )
    ml = fields.Integer(load_default=0, validate=validate.Range(min=0, max=MOST_ML))


class BlankForm(WhenForm):
    """The lot of the blank's water, and its bottle where none is set."""

    code = fields.String(load_default="", validate=validate.Length(max=60))
    water_lot = fields.String(load_default="", validate=validate.Length(max=60))


class SignForm(Schema):
    """The typed name; ``close`` ends the visit, ``crate`` counts its bottles in the same press."""

    name = fields.String(load_default="", validate=validate.Length(max=120))
    crate = fields.Integer(
        load_default=None,
        validate=validate.Range(min=0, max=MOST_CRATE, error="Type how many bottles you count."),
        error_messages={"invalid": "Type how many bottles you count."},
    )
    close = fields.String(load_default="", validate=validate.OneOf(("", "yes")))


class CloseForm(WhenForm):
    """How the visit ended."""

    outcome = fields.String(load_default="", validate=validate.OneOf(("", *kitchen.OUTCOMES)))


class DifferentForm(WhenForm):
    """Something was not as the protocol says."""

    deviation = fields.String(
        required=True,
        validate=validate.Length(min=1, max=40),
        error_messages={"required": "Choose what was different."},
    )
    reason = fields.String(load_default="", validate=NOTE)


class DoneForm(WhenForm):
    """What was done already; each draw has ``code_n``, ``fill_n``, ``was_n``."""

    deviation = fields.String(load_default="", validate=validate.Length(max=40))
    reason = fields.String(load_default="", validate=NOTE)


class RanForm(Schema):
    """When the tap ran to waste, where it was not pressed at the time."""

    opened_local = fields.String(load_default="", validate=LOCAL)
    shut_local = fields.String(load_default="", validate=LOCAL)
    fold = fields.String(load_default="", validate=FOLD)
    reason = fields.String(load_default="", validate=NOTE)


class SwapForm(WhenForm):
    """Another bottle in the place of one that will hold no water."""

    draw = fields.Integer(
        required=True,
        error_messages={"required": "Choose the draw.", "invalid": "Choose the draw."},
    )
    why = fields.String(
        load_default="broken", validate=validate.OneOf(drawing.VOID_WHYS, error="Choose why.")
    )
    code = fields.String(
        required=True, validate=validate.Length(min=1, max=60, error="Scan or type the new code.")
    )


class TakeBackForm(Schema):
    """Which entry's press is taken back."""

    of = fields.String(required=True, validate=validate.Length(equal=43))


def when_of(form: Mapping[str, Any], zone: str) -> When:
    """Return when it was done: now, or the local time typed.

    Raises:
        NoSuchLocalTime, AmbiguousLocalTime: The clocks changed in that hour.
    """
    if not form.get("done_local"):
        return When(basis="stated", told_by=form["told_by"]) if form.get("told_by") else NOW
    return stated_at(to_utc(form["done_local"], zone, fold_of(form)), told_by=form["told_by"])


def fold_of(form: Mapping[str, Any]) -> int | None:
    """Return which of two moments is meant, None where nobody said."""
    return int(form["fold"]) if form.get("fold") else None


def moment_of(form: Mapping[str, Any], name: str, zone: str) -> datetime | None:
    """Return the instant of a typed local time, else of the chip chosen, None of neither."""
    if form.get(f"{name}_local"):
        return to_utc(form[f"{name}_local"], zone, fold_of(form))
    return datetime.fromisoformat(form[name]) if form.get(name) else None


def drawn_of(sent: Mapping[str, str], draws: tuple[int, ...]) -> dict[int, drawing.Drawn]:
    """Return what a run's form says of each of its draws."""
    found = {}
    for draw in draws:
        fill = sent.get(f"fill_{draw}", sent.get("fill", "line"))
        millilitres = sent.get(f"ml_{draw}", "").strip() or "0"
        if not millilitres.isdecimal() or int(millilitres) > MOST_ML:
            raise BadForm({f"ml_{draw}": ["Give whole millilitres, or nothing."]})
        found[draw] = drawing.Drawn(
            draw=draw,
            code=sent.get(f"code_{draw}", ""),
            fill=fill,
            volume_ml=int(millilitres),
            water_lot=sent.get("water_lot", ""),
        )
    return found
