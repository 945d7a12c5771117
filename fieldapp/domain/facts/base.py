"""What every fact is: a frozen dataclass with its kind, subjects, reach and private fields.

A fact says what somebody did or stated. It holds strings, integers, booleans, tuples and
mappings, never a float; a decimal is a string with its unit in the name. A field whose name
would be a word of Python or of the class carries a trailing underscore that the entry's key
does not have (``from_`` is ``from``).
"""

import dataclasses
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar, Self, dataclass_transform

ALL = "all"
"""Goes to every enrolled device: rounds, protocols, persons, devices."""
ROUTE = "route"
"""Goes to the devices that walk its route."""
ROUTE_LAB = "route+lab"
"""Goes to its route and to the round's laboratory, there without the private part."""
CENTRAL = "central"
"""Pulled by no device: results, answers, settlements."""

KINDS: dict[str, type["Fact"]] = {}
"""Every kind this program knows; an unknown kind is kept and passed on (design 5)."""

_FIELDS: dict[str, dict[str, str]] = {}

SUBJECTS = (
    "round",
    "route",
    "visit",
    "site",
    "bottle",
    "person",
    "dev",
    "cooler",
    "finding",
    "protocol",
    "log",
)
"""Fields that name what a fact is about; ``bottles`` names several."""


def private() -> Any:
    """Mark a text field that never enters the signed body (design 5, R6)."""
    return field(default="", metadata={"private": True})


@dataclass(frozen=True, kw_only=True)
class Fact:
    """One thing that happened, as the store records it and the pages read it."""

    kind: ClassVar[str]
    reach: ClassVar[str]
    place: ClassVar[str]
    done_by_a_person: ClassVar[bool] = False

    def data(self) -> dict[str, Any]:
        """Return the signed part as plain values; absent optional fields are left out."""
        return _plain(self, private_part=False)

    def private_part(self) -> dict[str, Any]:
        """Return the private part, only the fields that hold something."""
        return _plain(self, private_part=True)

    def subjects(self) -> tuple[str, ...]:
        """Return what the fact is about, as ``visit:V-7``, ``bottle:…``."""
        found: list[str] = []
        for name in SUBJECTS:
            value = getattr(self, name, "")
            if isinstance(value, str) and value:
                found.append(f"{name}:{value}")
        found.extend(f"bottle:{code}" for code in getattr(self, "bottles", ()))
        return tuple(dict.fromkeys(found))

    def blobs(self) -> tuple[dict[str, Any], ...]:
        """Return the pictures an entry of this fact names, as ``{h, n, t}``."""
        return ()

    @classmethod
    def read(cls, data: Mapping[str, Any], private_part: Mapping[str, Any] | None = None) -> Self:
        """Make the fact from an entry's data; unknown fields are ignored, never refused.

        Raises:
            TypeError: a required field is missing (the store lists it as unreadable).
        """
        known = fields_of(cls)
        given = {**data, **(private_part or {})}
        return cls(**{name: _frozen(given[key]) for key, name in known.items() if key in given})


@dataclass(frozen=True, kw_only=True)
class Done(Fact):
    """A fact of something a person did: when, and on whose word (design 5, R19).

    ``done_at`` is UTC text, empty at the press; ``basis`` is empty (pressed), ``stated`` with
    ``told_by``, or ``paper`` with ``writer``.
    """

    done_by_a_person: ClassVar[bool] = True
    done_at: str = ""
    basis: str = ""
    told_by: str = ""
    writer: str = ""


@dataclass_transform(frozen_default=True, kw_only_default=True)
def fact(kind: str, *, place: str, reach: str) -> Callable[[type[Any]], type[Any]]:
    """Declare a class a fact of that kind and enter it in the registry."""

    def declare(cls: type[Any]) -> type[Any]:
        made = dataclass(frozen=True, kw_only=True)(cls)
        made.kind, made.place, made.reach = kind, place, reach
        KINDS[kind] = made
        return made

    return declare


def fields_of(cls: type[Fact]) -> dict[str, str]:
    """Return the entry's keys and the attribute each one fills."""
    if cls.kind not in _FIELDS:
        _FIELDS[cls.kind] = {f.name.rstrip("_"): f.name for f in dataclasses.fields(cls)}
    return _FIELDS[cls.kind]


def private_fields(cls: type[Fact]) -> frozenset[str]:
    """Return the attributes whose values stay out of the signed body."""
    return frozenset(f.name for f in dataclasses.fields(cls) if f.metadata.get("private"))


def _plain(given: Fact, *, private_part: bool) -> dict[str, Any]:
    hidden = private_fields(type(given))
    defaults = {f.name: f.default for f in dataclasses.fields(given)}
    return {
        key: _thawed(getattr(given, name))
        for key, name in fields_of(type(given)).items()
        if (name in hidden) == private_part and getattr(given, name) != defaults[name]
    }


def _frozen(value: Any) -> Any:
    if isinstance(value, list):
        return tuple(_frozen(item) for item in value)
    return value


def _thawed(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _thawed(item) for key, item in value.items()}
    if isinstance(value, Iterable) and not isinstance(value, str | bytes):
        return [_thawed(item) for item in value]
    return value
