"""The cells of one row of results, each read by its column."""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime
from decimal import Decimal

from fieldapp.domain.levels import BadLevel, Level, read_level, read_unit
from fieldapp.domain.timetext import format_utc
from fieldapp.reading.faults import Findings
from fieldapp.reading.part import not_printable

LONGEST_CELL = 80

ANALYTES = {"lead": "lead", "pb": "lead", "copper": "copper", "cu": "copper"}

# A workbook runs what begins so; a level below zero is refused as such, not as a formula.
_FORMULA = re.compile(r"=|@|[+-](?![\d.,])")
_DAY = re.compile(r"\d{4}-\d\d-\d\d", re.ASCII)
_MOMENT = re.compile(
    r"(\d{4}-\d\d-\d\d)[T ](\d\d:\d\d(?::\d\d(?:\.\d{1,6})?)?)(Z|[+-]\d\d:\d\d)?", re.ASCII
)


@dataclass(frozen=True, slots=True)
class Cells:
    """One row's texts by column; columns that mean nothing stand under the empty name."""

    row: int
    texts: Mapping[str, str]
    findings: Findings
    _faulty: set[str] = field(default_factory=set)

    def text(self, column: str) -> str:
        """Return the text of a column, empty where the row has none."""
        return self.texts.get(column, "") if column else ""

    def fault(self, kind: str, column: str, value: object = "", **values: object) -> None:
        """Add a fault at a column of this row."""
        self._faulty.add(column)
        self.findings.add(kind, column, value, row=self.row, values=values)

    def note(self, kind: str, **values: object) -> None:
        """Add a note at this row."""
        self.findings.note(kind, row=self.row, values=values)

    def faulty(self, *columns: str) -> bool:
        """Say whether one of the columns has a fault already."""
        return not self._faulty.isdisjoint(columns)


def read_plain(cells: Cells, column: str) -> str:
    """Return a column's text: short, printable and no formula; else empty with a fault."""
    text = cells.text(column)
    if _FORMULA.match(text):
        cells.fault("formula", column, text)
    elif len(text) > LONGEST_CELL:
        cells.fault("too-long", column, text, most=LONGEST_CELL)
    elif any(not_printable(c) for c in text):
        cells.fault("control", column, text)
    else:
        return text
    return ""


def read_analyte(cells: Cells) -> str:
    """Return ``lead`` or ``copper``."""
    text = read_plain(cells, "analyte")
    analyte = ANALYTES.get(text.casefold(), "")
    if not analyte and not cells.faulty("analyte"):
        cells.fault("analyte" if text else "analyte-blank", "analyte", text)
    return analyte


def read_reported(cells: Cells) -> tuple[dict[str, str], dict[str, object]]:
    """Return value, unit, qualifier and limits as texts, and the level that they mean in µg/L.

    Both are empty of meaning where a fault was added.
    """
    unit = _read_unit(cells)
    text = read_plain(cells, "value")
    limits = {column: read_plain(cells, column) for column in ("detection", "reporting")}
    nothing = {"value": "", "unit": unit}
    if cells.faulty("value"):
        return nothing, {}
    level = _level(cells, "value", text, unit or "ug/L")
    seen = {
        column: _level(cells, column, limit, unit or "ug/L") if limit else None
        for column, limit in limits.items()
    }
    if level is None or not unit or cells.faulty("detection", "reporting"):
        return nothing, {}
    detection, reporting = (found.value if found else None for found in seen.values())
    if detection is not None and reporting is not None and detection > reporting:
        cells.fault("value-limits", "detection", limits["detection"], right=limits["reporting"])
    texts = {
        "value": _decimal_text(text),
        "unit": unit,
        "qualifier": level.qualifier,
        **{column: _decimal_text(limit) for column, limit in limits.items()},
    }
    return texts, {"value": level.value, "qualifier": level.qualifier}


def read_moment(cells: Cells, column: str) -> str:
    """Return an ISO date or moment; one with an offset as UTC, one without as it is written."""
    text = read_plain(cells, column)
    try:
        if _DAY.fullmatch(text):
            return date.fromisoformat(text).isoformat()
        found = _MOMENT.fullmatch(text)
        if found:
            at = datetime.fromisoformat(f"{found[1]}T{found[2]}{found[3] or ''}")
            return format_utc(at) if found[3] else f"{found[1]}T{found[2]}"
    except (ValueError, OverflowError):
        pass
    if text:
        cells.fault("no-time", column, text)
    return ""


def _read_unit(cells: Cells) -> str:
    text = read_plain(cells, "unit")
    if cells.faulty("unit"):
        return ""
    if not text:
        cells.fault("unit-blank", "unit")
        return ""
    try:
        factor = read_unit(text)
    except BadLevel:
        cells.fault("unit", "unit", text)
        return ""
    return "ug/L" if factor == Decimal(1) else "mg/L"


def _level(cells: Cells, column: str, text: str, unit: str) -> Level | None:
    try:
        level = read_level(text, unit)
    except BadLevel as fault:
        cells.fault(f"value-{fault.values['why']}", column, text)
        return None
    if column != "value" and level.qualifier:
        cells.fault("value-number", column, text)
        return None
    if column != "value" and level.value == 0:
        cells.fault("value-zero-limit", column, text)
        return None
    return level


def _decimal_text(text: str) -> str:
    """Return the number in a cell with a point, its digits kept; nothing of a bare non-detect."""
    number = text.lstrip("<").strip().replace(",", ".")
    return f"{Decimal(number):f}" if number[:1].isdigit() or number[:1] == "." else ""
