"""Levels as laboratories write them. Every level is a Decimal in µg/L."""

import re
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

from fieldapp.domain.errors import RuleBroken

Qualifier = Literal["", "<", "ND"]

# In drinking water 1 ppb is taken as 1 µg/L (computation by mass, density 1 kg/L).
# µ is written with either of two signs: U+00B5 and the Greek letter U+03BC.
UG_PER_L = {
    "ug/l": Decimal(1),
    "\u00b5g/l": Decimal(1),
    "\u03bcg/l": Decimal(1),
    "ppb": Decimal(1),
    "mg/l": Decimal(1000),
}

# So few digits that Decimal's 28 hold every product exactly; no laboratory writes more.
_NUMBER = re.compile(r"(\d{1,12}(?:[.,]\d{1,12})?|\.\d{1,12})(?:[eE]([+-]?\d{1,2}))?", re.ASCII)
# 1,234 is a thousand or one and a bit; 0,005 and 1234,567 can only be decimal commas.
_THOUSANDS = re.compile(r"[1-9]\d{0,2}(,\d{3})+(\.\d+)?", re.ASCII)
_NOT_DETECTED = frozenset({"nd", "n.d."})


class BadLevel(RuleBroken):
    """A level, limit or unit of a report cannot be read; ``value`` is the text as it came.

    ``why`` is ``blank``, ``number``, ``negative``, ``thousands`` (1,234 may be two things:
    write 1234 or 1.234), ``above`` (a level above the instrument's range is no result),
    ``zero-limit`` (less than nothing), ``unit`` (with ``known``) or ``limits`` (a detection
    limit above the reporting limit, with ``detection`` and ``reporting``).
    """

    kind = "bad-level"


@dataclass(frozen=True, slots=True)
class Level:
    """One analyte's level in one bottle, with what the laboratory could see.

    ``value`` is in µg/L: as measured; for the qualifier ``<`` the limit it lies below; for
    ``ND`` None. ``detection`` and ``reporting`` are the limits in µg/L, None where not given.
    """

    value: Decimal | None
    qualifier: Qualifier = ""
    detection: Decimal | None = None
    reporting: Decimal | None = None

    def __post_init__(self) -> None:
        if (self.value is None) != (self.qualifier == "ND"):
            raise BadLevel(value=self.value, why="number")
        for part in (self.value, self.detection, self.reporting):
            _require_possible(part)
        if self.detection is not None and self.reporting is not None:
            _require_order(self.detection, self.reporting)


def read_level(
    text: str, unit: str, *, detection: str | None = None, reporting: str | None = None
) -> Level:
    """Return the level that a report's ``text`` means, in µg/L.

    ``text`` is a number with a point or a comma, ``<`` and a number, or ``ND``. The limits are
    texts in the same unit, blank or None where the report gives none.

    Raises:
        BadLevel: ``text``, ``unit`` or a limit cannot be read, or could mean two things.
    """
    factor = read_unit(unit)
    limits = [_read_limit(limit, factor) for limit in (detection, reporting)]
    bare = text.strip()
    if bare.casefold() in _NOT_DETECTED:
        return Level(None, "ND", *limits)
    if bare.startswith("<"):
        below = _read_number(bare[1:].strip(), text) * factor
        if below == 0:
            raise BadLevel(value=text, why="zero-limit")
        return Level(below, "<", *limits)
    return Level(_read_number(bare, text) * factor, "", *limits)


def read_unit(unit: str) -> Decimal:
    """Return by what a number in ``unit`` is multiplied to be in µg/L.

    Raises:
        BadLevel: The unit is none of those known.
    """
    factor = UG_PER_L.get(unit.strip().casefold().replace(" ", ""))
    if factor is None:
        raise BadLevel(value=unit, why="unit", known=("ug/L", "\u00b5g/L", "mg/L", "ppb"))
    return factor


def _read_limit(text: str | None, factor: Decimal) -> Decimal | None:
    if text is None or not text.strip():
        return None
    limit = _read_number(text.strip(), text) * factor
    if limit == 0:
        raise BadLevel(value=text, why="zero-limit")
    return limit


def _read_number(bare: str, text: str) -> Decimal:
    if not bare:
        raise BadLevel(value=text, why="blank")
    if bare[0] in "-\u2212":
        raise BadLevel(value=text, why="negative")
    if bare[0] in ">\u2265":
        raise BadLevel(value=text, why="above")
    if _THOUSANDS.fullmatch(bare):
        raise BadLevel(value=text, why="thousands")
    number = _NUMBER.fullmatch(bare)
    if number is None:
        raise BadLevel(value=text, why="number")
    return Decimal(number[1].replace(",", ".")).scaleb(int(number[2] or 0))


def _require_possible(part: Decimal | None) -> None:
    if part is None:
        return
    if not part.is_finite():
        raise BadLevel(value=part, why="number")
    if part < 0:
        raise BadLevel(value=part, why="negative")


def _require_order(detection: Decimal, reporting: Decimal) -> None:
    if detection > reporting:
        raise BadLevel(value=detection, why="limits", detection=detection, reporting=reporting)
