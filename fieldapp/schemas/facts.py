"""The schema of each kind of entry, for our own writes: unknown fields and wrong types are refused.

Schemas are made from the fact's own declaration, so a kind cannot be written without one. Reading
verified entries goes by plain constructors and ignores what it does not know (design 5).
"""

import dataclasses
import re
import typing
from collections.abc import Mapping
from functools import cache
from typing import Any

from marshmallow import RAISE, Schema, ValidationError, fields, validate

from fieldapp.domain.codes import ALPHABET
from fieldapp.domain.facts import EntryCorrected, Fact
from fieldapp.domain.facts.base import KINDS, private_fields

CODE = validate.Regexp(rf"[{ALPHABET}]{{11}}\Z", error="is not a bottle code")
UTC_TEXT = validate.Regexp(
    r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{3}Z\Z", error="is not UTC text with milliseconds"
)
DECIMAL = validate.Regexp(r"-?\d+(\.\d+)?\Z", error="is not a decimal text")
DAY = validate.Regexp(r"\d{4}-\d\d-\d\d\Z", error="is not an ISO date")
SOME = validate.Length(min=1, max=200)
LONG = validate.Length(max=24_000)
SHORT = validate.Length(max=2000)

VOCABULARY: dict[tuple[str, str], tuple[str, ...]] = {
    ("bottle.filled", "fill"): ("line", "below", "over", "spilled"),
    ("draw.poured", "fill"): ("line", "below", "over", "spilled"),
    ("bottle.received", "outcome"): ("accepted", "held", "refused"),
    ("water.used", "exact"): ("at", "about", "between", "unknown"),
    ("water.used", "known_by"): ("seen", "stated", "metered"),
    ("result.reported", "qualifier"): ("", "<", "ND"),
    ("result.reported", "unit"): ("ug/L", "mg/L"),
    ("bottle.set", "held"): ("known", "unknown"),
    ("occupant.agreed", "how"): ("spoken", "signed", "refused"),
    ("bottle.located", "how"): ("with-me", "left-behind", "broken", "elsewhere"),
    ("handover.offered", "to"): ("laboratory", "courier", "night-box", "colleague"),
}
_BY_NAME: dict[str, Any] = {
    "bottle": CODE, "done_at": UTC_TEXT, "learned_at": UTC_TEXT, "day": DAY, "value": DECIMAL,
    "detection": DECIMAL, "reporting": DECIMAL,
    "basis": validate.OneOf(("stated", "paper")), "toml": LONG, "orig": LONG, "deflated": LONG,
}  # fmt: skip

_EMPTY_ALLOWED = {
    # a bare non-detect states no value
    ("result.reported", "value"): validate.Regexp(
        r"(-?\d+(\.\d+)?)?\Z", error="is neither a decimal text nor empty"
    ),
}


class UnwritableFact(ValueError):
    """A fact of ours does not fit its own schema; a fault of the program, never of a person."""


def check_fact(given: Fact) -> None:
    """Refuse a fact that its schema does not take, before it is signed.

    Raises:
        UnwritableFact: with the kind and every fault.
    """
    try:
        schema_of(given.kind).load({**given.data(), **given.private_part()})
        if isinstance(given, EntryCorrected):
            schema_of(given.kind_).load({**given.data_, **(given.hidden or {})})
    except ValidationError as fault:
        raise UnwritableFact(f"{given.kind}: {fault.normalized_messages()}") from fault


@cache
def schema_of(kind: str) -> Schema:
    """Return the schema of a kind, made from its class."""
    cls = KINDS[kind]
    hints = typing.get_type_hints(cls)
    made: dict[str, fields.Field] = {}
    for one in dataclasses.fields(cls):
        required = one.default is dataclasses.MISSING
        key = one.name.rstrip("_")
        made[key] = _field(kind, key, hints[one.name], required, one.name in private_fields(cls))
    schema = Schema.from_dict(made, name=re.sub(r"\W", "_", kind))
    return schema(unknown=RAISE)


class _Yes(fields.Field[bool]):
    """True or false itself, nothing that passes for it."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> bool:
        if not isinstance(value, bool):
            raise ValidationError("is neither true nor false")
        return value


class _Whole(fields.Field[int]):
    """A whole number, and true is none."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> int:
        if not isinstance(value, int) or isinstance(value, bool):
            raise ValidationError("is no whole number")
        return value


def _field(kind: str, key: str, hint: Any, required: bool, hidden: bool) -> fields.Field:
    origin, inner = typing.get_origin(hint), typing.get_args(hint)
    if hint is bool:
        return _Yes(required=required)
    if hint in (int, int | None):
        return _Whole(required=required)
    if origin is tuple:
        return fields.List(_items(key, inner[0]), required=required)
    if origin is Mapping or (inner and typing.get_origin(inner[0]) is Mapping):
        return fields.Dict(keys=fields.String(), required=required)
    checks = [SHORT] if hidden else _checks(kind, key, required)
    return fields.String(required=required, validate=checks)


def _items(key: str, hint: Any) -> fields.Field:
    if hint is int:
        return _Whole()
    if hint is str:
        return fields.String(validate=[CODE] if key == "bottles" else [SOME])
    return fields.Dict(keys=fields.String())


def _checks(kind: str, key: str, required: bool) -> list[Any]:
    if allowed := VOCABULARY.get((kind, key)):
        return [validate.OneOf(allowed)]
    if (kind, key) in _EMPTY_ALLOWED:
        return [_EMPTY_ALLOWED[kind, key]]
    if key in _BY_NAME:
        return [_BY_NAME[key]]
    return [validate.Length(max=200)] if not required or key in ("from", "to") else []
