"""What the forms of the crate and its coolers may send."""

from collections.abc import Mapping
from typing import Any

from marshmallow import Schema, fields, validate

from fieldapp.commands import crate, custody
from fieldapp.web.kitchen_forms import NOTE, WhenForm

MOST_BOTTLES = 500
SEALS = 4
"""So many seals one form takes; a cooler rarely bears two."""
YES = validate.OneOf(("", "yes"))
COUNT = validate.Range(min=0, max=MOST_BOTTLES, error="Type how many bottles you count.")
NO_NUMBER = {"required": "Type how many bottles you count.", "invalid": "Type a whole number."}


class PackForm(WhenForm):
    """One bottle, or with ``all`` every one in the crate, into the cooler of a box."""

    box = fields.String(load_default="", validate=validate.Length(max=20))
    code = fields.String(load_default="", validate=validate.Length(max=60))
    all = fields.String(load_default="", validate=YES)
    already = fields.String(load_default="", validate=YES)


class LocateForm(Schema):
    """Where a bottle is that is in no cooler."""

    bottle = fields.String(required=True, validate=validate.Length(min=1, max=60))
    how = fields.String(
        required=True, validate=validate.OneOf(crate.WHEREABOUTS, error="Choose where it is.")
    )
    where = fields.String(load_default="", validate=NOTE)


class DoorForm(Schema):
    """How many bottles of a visit are in the crate."""

    count = fields.Integer(required=True, validate=COUNT, error_messages=NO_NUMBER)


class SealForm(WhenForm):
    """The bottles as counted and the seals, ``seal_1`` and on."""

    count = fields.Integer(required=True, validate=COUNT, error_messages=NO_NUMBER)
    already = fields.String(load_default="", validate=YES)


class ReopenForm(WhenForm):
    """Why the seals were broken; the new ones as ``seal_1`` and on."""

    reason = fields.String(load_default="", validate=NOTE)


class RelinquishForm(WhenForm):
    """Who takes the cooler."""

    to = fields.String(
        required=True, validate=validate.OneOf(custody.TO, error="Choose who takes it.")
    )
    waybill = fields.String(load_default="", validate=validate.Length(max=80))
    name = fields.String(load_default="", validate=validate.Length(max=120))
    already = fields.String(load_default="", validate=YES)


class TakeBackForm(Schema):
    """Which entry's press is taken back."""

    of = fields.String(required=True, validate=validate.Length(equal=43))


def seals_of(sent: Mapping[str, Any]) -> list[str]:
    """Return the seals' numbers that a form names, in order; the longest that fits is kept."""
    return [str(sent.get(f"seal_{n}", ""))[:60] for n in range(1, SEALS + 1)]
