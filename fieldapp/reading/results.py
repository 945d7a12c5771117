"""The laboratory's results as a table of text: one analyte of one bottle a row.

The first row that is not empty names the columns; ``COLUMNS`` lists how each may be called.
Case, blanks, hyphens and underscores in a heading make no difference. Cells are separated by
commas, semicolons or tabs; a decimal comma is read where commas do not separate.
"""

import csv
import hashlib
import io
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass

from fieldapp.domain.codes import BadCode, normalise
from fieldapp.domain.facts import ResultReported
from fieldapp.reading.cells import Cells, read_analyte, read_moment, read_plain, read_reported
from fieldapp.reading.faults import Findings, Note, shown
from fieldapp.reading.part import tidy

LARGEST_BYTES = 5_000_000

# How a column may be headed; spellings of our own choice.
COLUMNS: dict[str, tuple[str, ...]] = {
    "bottle": ("bottle", "bottle code", "code"),
    "laboratory_number": (
        "laboratory number",
        "laboratory no",
        "lab number",
        "lab no",
        "laboratory id",
        "lab id",
    ),
    "analyte": ("analyte", "metal", "parameter"),
    "value": ("value", "result", "level"),
    "unit": ("unit", "units"),
    "detection": ("detection", "detection limit", "mdl", "lod"),
    "reporting": ("reporting", "reporting limit", "rl", "loq"),
    "method": ("method", "analysis method"),
    "analysed_at": (
        "analysed at",
        "analyzed at",
        "analysed",
        "analyzed",
        "analysed on",
        "analyzed on",
        "analysis date",
    ),
}
NEEDED = ("analyte", "value", "unit")
WELCOME = ("detection", "reporting", "method", "analysed_at")

Resolve = Callable[[str, str], str | None]
"""Given a bottle's code or else a laboratory's number (the other empty), the code, or None."""


@dataclass(frozen=True, slots=True)
class ResultRow:
    """One row as read. ``bottle`` is the code it was found to mean, in eleven characters.

    ``value``, ``detection`` and ``reporting`` are decimal texts in ``unit`` (``ug/L``, ``mg/L``);
    ``value`` is empty for a bare non-detect. ``analysed_at`` is an ISO date or moment.
    """

    row: int
    bottle: str
    laboratory_number: str
    analyte: str
    value: str
    unit: str
    qualifier: str = ""
    detection: str = ""
    reporting: str = ""
    method: str = ""
    analysed_at: str = ""

    def reported(self, file: str, *, provisional: bool = False) -> ResultReported:
        """Return the fact of this row; ``file`` is the SHA-256 of the file as it came."""
        return ResultReported(
            bottle=self.bottle,
            analyte=self.analyte,
            value=self.value,
            unit=self.unit,
            qualifier=self.qualifier,
            detection=self.detection,
            reporting=self.reporting,
            method=self.method,
            analysed_at=self.analysed_at,
            laboratory_number=self.laboratory_number,
            provisional=provisional,
            file=file,
            row=self.row,
        )


@dataclass(frozen=True, slots=True)
class ResultsFile:
    """A laboratory's file as read: its rows, and ``sha256`` over its bytes as they came."""

    file: str
    sha256: str
    rows: tuple[ResultRow, ...]
    notes: tuple[Note, ...] = ()

    @property
    def facts(self) -> tuple[ResultReported, ...]:
        """The fact of every row."""
        return tuple(row.reported(self.sha256) for row in self.rows)


def read_results(data: bytes, name: str, *, resolve: Resolve) -> ResultsFile:
    """Return the results that a file reports, every row of it or none.

    ``resolve(code, "")`` and ``resolve("", number)`` say which bottle is meant.

    Raises:
        BadFile: With every fault of the file; then nothing of it is to be used.
    """
    findings = Findings(name)
    table = _table(data, findings)
    heads = _heads(table[0], findings)
    findings.settle()
    read = _Rows(heads, findings, resolve)
    for row, cells in table[1:]:
        read.take(row, cells)
    if len(table) == 1:
        findings.add("no-rows")
    findings.settle()
    sha256 = hashlib.sha256(data).hexdigest()
    return ResultsFile(findings.file, sha256, tuple(read.rows), tuple(findings.notes))


_Row = tuple[int, list[str]]


def _table(data: bytes, findings: Findings) -> list[_Row]:
    """Return the rows that hold something, each with its number; the first is the header."""
    text = _decoded(data, findings)
    rows: list[_Row] = []
    try:
        for row, cells in _records(text):
            if any(cells):
                rows.append((row, cells))
    except csv.Error as fault:
        row = rows[-1][0] + 1 if rows else 1
        findings.add("not-a-row", row=row, values={"says": str(fault)})
    if not rows and not findings.faults:
        findings.add("empty")
    findings.settle()
    return rows


def _records(text: str) -> Iterator[_Row]:
    lines = text.splitlines()
    header = next((line for line in lines if line.strip(' \t,;"')), "")
    separator = max(",;\t", key=lambda mark: (len(_known(header.split(mark))), header.count(mark)))
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    for row, cells in enumerate(reader, start=1):
        yield row, [tidy(cell) for cell in cells]


def _known(headings: Sequence[str]) -> list[str]:
    return [column for column in map(_column, headings) if column]


def _column(heading: str) -> str:
    plain = tidy(heading.replace("_", " ").replace("-", " ").replace('"', " ")).casefold()
    return next((column for column, names in COLUMNS.items() if plain.rstrip(".") in names), "")


def _decoded(data: bytes, findings: Findings) -> str:
    """Return the text of the file, empty with a fault where it is none."""
    fault = _no_text(data)
    if fault:
        findings.add(fault[0], values=fault[1])
        return ""
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        pass
    try:
        text = data.decode("cp1252")
    except UnicodeDecodeError as wrong:
        line = data.count(b"\n", 0, wrong.start) + 1
        findings.add("encoding", values={"line": line})
        return ""
    findings.note("not-utf-8")
    return text


def _no_text(data: bytes) -> tuple[str, dict[str, str]] | None:
    if len(data) > LARGEST_BYTES:
        return "too-large", {"most": f"{LARGEST_BYTES // 1_000_000} MB"}
    if not data.strip():
        return "empty", {}
    for beginning, what in _NOT_TABLES.items():
        if data.startswith(beginning):
            return "not-a-table", {"what": what}
    return ("not-a-table", {"what": "file of raw bytes"}) if b"\0" in data else None


_NOT_TABLES = {
    b"PK\x03\x04": "workbook or archive",
    b"\xd0\xcf\x11\xe0": "workbook of an old kind",
    b"%PDF": "PDF",
    b"\xff\xfe": "text in UTF-16",
    b"\xfe\xff": "text in UTF-16",
}


def _heads(header: _Row, findings: Findings) -> tuple[str, ...]:
    row, cells = header
    heads: list[str] = []
    for cell in cells:
        column = _column(cell)
        if column and column in heads:
            findings.add("column-twice", cell, column, row=row)
        elif not column and cell:
            findings.note("column-left-out", "", cell)
        heads.append(column)
    if not any(heads):
        findings.add("no-header", row=row, values={"right": tuple(COLUMNS)})
        return ()
    if "bottle" not in heads and "laboratory_number" not in heads:
        findings.add("no-bottle-column", row=row)
    for column in NEEDED:
        if column not in heads:
            names = {"right": COLUMNS[column]}
            findings.add("no-column", "", column, row=row, values=names)
    for column in WELCOME:
        if column not in heads:
            findings.note("column-absent", "", column)
    return tuple(heads)


class _Rows:
    """The rows read so far, and who said what of which bottle."""

    def __init__(self, heads: Sequence[str], findings: Findings, resolve: Resolve) -> None:
        self.heads = heads
        self.findings = findings
        self.resolve = resolve
        self.rows: list[ResultRow] = []
        self._said: dict[tuple[str, str], tuple[int, Mapping[str, object]]] = {}

    def take(self, row: int, texts: Sequence[str]) -> None:
        """Read one row, or add what is wrong with it."""
        if len(_known(texts)) >= len(NEEDED):
            self.findings.add("header-again", row=row)
            return
        cells = Cells(row, dict(zip(self.heads, texts, strict=False)), self.findings)
        for extra in filter(None, texts[len(self.heads) :]):
            cells.fault("extra-cell", "", extra)
        before = len(self.findings.faults)
        bottle, number = self._bottle(cells)
        analyte = read_analyte(cells)
        reported, level = read_reported(cells)
        made = ResultRow(
            row=row,
            bottle=bottle,
            laboratory_number=number,
            analyte=analyte,
            method=read_plain(cells, "method"),
            analysed_at=read_moment(cells, "analysed_at"),
            **reported,
        )
        if len(self.findings.faults) == before and self._new(cells, made, level):
            self.rows.append(made)

    def _bottle(self, cells: Cells) -> tuple[str, str]:
        typed, number = read_plain(cells, "bottle"), read_plain(cells, "laboratory_number")
        code = self._code(cells, typed) if typed else ""
        by_number = self.resolve("", number) if number else None
        if number and by_number is None and code:
            # the code says which bottle it is; the receipt may not have reached this node (R7)
            cells.note("number-unheard", value=number)
        elif number and by_number is None:
            cells.fault("unknown-number", "laboratory_number", number)
        elif code and by_number and by_number != code:
            cells.fault("disagree", "laboratory_number", number, right=by_number, bottle=code)
        if not typed and not number and not cells.faulty("bottle", "laboratory_number"):
            cells.fault("no-bottle", "bottle" if "bottle" in self.heads else "laboratory_number")
        return code or by_number or "", number

    def _code(self, cells: Cells, typed: str) -> str:
        try:
            code = normalise(typed)
        except BadCode as fault:
            about = {key: shown(v) for key, v in fault.values.items() if key not in ("why", "code")}
            cells.fault(f"code-{fault.values['why']}", "bottle", typed, **about)
            return ""
        if self.resolve(code, "") is None:
            cells.fault("unknown-bottle", "bottle", typed)
            return ""
        return code

    def _new(self, cells: Cells, made: ResultRow, level: Mapping[str, object]) -> bool:
        first, said = self._said.setdefault((made.bottle, made.analyte), (made.row, level))
        if first == made.row:
            return True
        if said == level:
            cells.note("row-again", first=first)
        else:
            cells.fault(
                "row-differs", "value", cells.text("value"), first=first, analyte=made.analyte
            )
        return False
