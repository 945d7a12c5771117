"""What can be wrong with a file: a kind with its place, and one sentence a kind.

Every sentence says what would be right or what to do next. The text that stands under a private
key is never part of a fault: faults are printed and kept where private text must not be (R6).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar, TypeVar

from fieldapp.domain.errors import RuleBroken
from fieldapp.words import N_, gettext, say

LONGEST_SHOWN = 60


@dataclass(frozen=True, slots=True)
class FileFault:
    """One thing wrong in a file.

    ``path`` is where: ``routes[0].visits[2].site`` counted from 0 as the file's own language
    does, with ``about`` the nearest id around it; in a table it is the column's name, and ``row``
    counts from 1 with the header as a spreadsheet does. ``value`` is what stands there.
    """

    kind: str
    file: str
    path: str = ""
    value: str = ""
    values: Mapping[str, str] = field(default_factory=dict)
    about: str = ""
    row: int = 0

    @property
    def says(self) -> str:
        """The sentence alone: what is wrong and what would be right."""
        values = {"value": self.value, **self.values}
        if self.values.get("right"):
            values["right"] = gettext(self.values["right"])
        return say(SENTENCES, self.kind, values)

    @property
    def line(self) -> str:
        """File, place and sentence in one line, as a terminal shows them."""
        place = {"file": self.file, "path": self.path, "about": self.about, "row": self.row}
        return gettext(self._form()).format(**place, says=self.says)

    def _form(self) -> str:
        if self.row:
            return AT_CELL if self.path else AT_ROW
        if self.path:
            return AT_PATH_OF if self.about else AT_PATH
        return AT_FILE


@dataclass(frozen=True, slots=True)
class Note(FileFault):
    """Something worth knowing that stops nothing: shown beside what was read."""


class BadFile(RuleBroken):
    """A file is wrong in one place or more; ``faults`` holds all of them, nothing was read in."""

    kind: ClassVar[str] = "bad-file"

    def __init__(self, faults: Sequence[FileFault]) -> None:
        self.faults = tuple(faults)
        super().__init__(file=self.faults[0].file, count=len(self.faults))


_Told = TypeVar("_Told", bound=FileFault)


class Findings:
    """The faults and notes of one file while it is read; none stands twice."""

    def __init__(self, file: str) -> None:
        self.file = shown(file)
        self.faults: list[FileFault] = []
        self.notes: list[Note] = []
        self._seen: set[str] = set()

    def add(self, kind: str, path: str = "", value: object = "", **place: Any) -> None:
        """Add a fault; ``place`` is ``about``, ``row`` and ``values`` as ``FileFault`` has them."""
        fault = self._made(FileFault, kind, path, value, **place)
        if self._new(fault):
            self.faults.append(fault)

    def note(self, kind: str, path: str = "", value: object = "", **place: Any) -> None:
        """Add a note; ``place`` as for a fault."""
        note = self._made(Note, kind, path, value, **place)
        if self._new(note):
            self.notes.append(note)

    def _made(
        self,
        of: type[_Told],
        kind: str,
        path: str,
        value: object,
        *,
        about: str = "",
        row: int = 0,
        values: Mapping[str, object] | None = None,
    ) -> _Told:
        return of(kind, self.file, path, shown(value), _texts(values or {}), about, row)

    def _new(self, fault: FileFault) -> bool:
        text = repr(fault)
        new = text not in self._seen
        self._seen.add(text)
        return new

    def settle(self) -> None:
        """Go on only with a file that has no fault.

        Raises:
            BadFile: With all that were found.
        """
        if self.faults:
            raise BadFile(self.faults)


def shown(value: object) -> str:
    """Return a value of the file as a line of print: short, and without what breaks a terminal."""
    if isinstance(value, dict):
        return "{…}"
    if isinstance(value, list):
        return "[…]"
    if isinstance(value, tuple):
        return ", ".join(map(shown, value))
    if value is None or isinstance(value, bool):
        return {None: "null", True: "true", False: "false"}[value]
    text = "".join(c if c.isprintable() else "·" for c in str(value)[: LONGEST_SHOWN + 1])
    return text if len(text) <= LONGEST_SHOWN else text[: LONGEST_SHOWN - 1] + "…"


def _texts(values: Mapping[str, object]) -> dict[str, str]:
    return {
        key: ", ".join(map(str, value)) if isinstance(value, tuple) else str(value)
        for key, value in values.items()
    }


AT_FILE = N_("{file}: {says}")
AT_PATH = N_("{file}, {path}: {says}")
AT_PATH_OF = N_("{file}, {path} ({about}): {says}")
AT_ROW = N_("{file}, row {row}: {says}")
AT_CELL = N_("{file}, row {row}, column {path}: {says}")

# The sentences of every fault and note, by kind; {value} is what stands in the file.
SENTENCES: dict[str, str] = {
    # any file
    "empty": N_("The file is empty. Bring the file as it was written."),
    "too-large": N_("The file is larger than {most}. Bring one of at most {most}."),
    "encoding": N_("Line {line} holds bytes that are not UTF-8. Save the file as UTF-8."),
    "not-a-table": N_("This is a {what}, not a table of text. Save it as CSV and bring that."),
    # a round's JSON
    "not-json": N_("Line {line}, column {column} is not JSON: {says}. Put that right first."),
    "bad-number": N_("A number cannot be read: {says}. Write it as a plain number."),
    "too-deep": N_("Lists lie in lists too deep to read. A round file is four lists deep."),
    "key-twice": N_("The key {value} stands twice in one place. Keep one of the two."),
    "missing": N_("{called} is missing. Give {right}."),
    "form": N_("{value} is not {right}. Give {right}."),
    "range": N_("{value} is not a whole number from {least} to {most}. Give one."),
    "private-form": N_("What stands here is not {right}. Give {right}."),
    "blank": N_("Nothing stands here. Give {right}."),
    "too-long": N_("The text has more than {most} characters. Shorten it to {most}."),
    "control": N_("The text holds a character that cannot be printed. Type the text anew."),
    "bad-id": N_(
        "{value} cannot be an id. Use 1 to {most} letters a to z, digits, full stop, hyphen or "
        "underscore, beginning with a letter or digit."
    ),
    "id-twice": N_("{value} is the id of {first} already. Give each its own id."),
    "word": N_("{value} is not known here. Use one of: {right}."),
    "word-twice": N_("{value} stands twice. Name it once."),
    "no-rule": N_("No rule is called {value}. Use one of: {right}."),
    "no-convention": N_("No convention is called {value}. Use one of: {right}."),
    "no-protocol": N_("No protocol is called {value}. Use one of: {right}."),
    "no-zone": N_("No time zone is called {value}. Use a name such as {right}."),
    "no-date": N_("{value} is no day of the calendar. Give a day as YYYY-MM-DD."),
    "reversed": N_("The period ends on {value}, before it begins on {first}. Swap or mend them."),
    "no-month-counts": N_(
        "None of the months {value} lies in the period {first} to {last}. Name a month of it."
    ),
    "bad-duration": N_("{value} is no length of time. Write it as PT48H or P2D."),
    "day-outside": N_("{value} lies outside the round. Give a day from {first} to {last}."),
    "not-listed": N_("{value} is not listed under {list}. List it there, or name one that is."),
    "not-a-sampler": N_("{value} is listed without the role sampler. Add the role, or name one."),
    "no-draw": N_("The visit has no bottle. Name a draw: {protocol} labels {right}."),
    "draw-unknown": N_(
        "{protocol} has no draw {value}; it labels {right}. A field blank or duplicate takes a "
        "number above {last} and its kind."
    ),
    "draw-poured": N_(
        "Draw {value} of {protocol} is poured away and has no bottle. Leave it out, or set "
        "keep_poured to true for the round."
    ),
    "draw-left-out": N_("{protocol} needs draw {value} too. Add it with its purpose."),
    "draw-twice": N_("Draw {value} stands twice in this visit. Keep one of the two."),
    "kind-missing": N_('A bottle drawn as {value} needs its kind. Add "kind": "{value}".'),
    "control-number": N_(
        "Draw {draw} of {protocol} is a {right} draw, no {value}. Give the {value} a number above "
        "{last}."
    ),
    "kind-of-protocol": N_("Draw {draw} is a {right} draw of {protocol}. Leave its kind out."),
    "kind-clash": N_(
        "The kind {given} does not go with the purpose {value}. Give both as {right}."
    ),
    "blank-twice": N_("A visit takes one field blank. Plan this one at another visit."),
    # a table of results
    "not-a-row": N_("The row cannot be read: {says}. Check its quotation marks."),
    "no-header": N_("No header was found. The first row names the columns: {right}."),
    "no-column": N_("The column {value} is missing. Add it; it may be called {right}."),
    "no-bottle-column": N_(
        "Neither a bottle nor a laboratory number has a column. Add bottle or laboratory_number."
    ),
    "column-twice": N_("Two columns are headed as {value}. Keep one of the two."),
    "header-again": N_("The header stands here again. Remove this row, or bring two files."),
    "no-rows": N_("The table has a header and no row. Bring the file with its results."),
    "extra-cell": N_("{value} stands beyond the last column. Check the row's separators."),
    "formula": N_("{value} is a formula. Put its value there, as a number or plain text."),
    "no-bottle": N_("No bottle is named. Give its code or the laboratory's number."),
    "analyte-blank": N_("No analyte stands here. Write lead (Pb) or copper (Cu)."),
    "code-length": N_("{value} has {length} characters; a bottle code has {wanted}. Type it anew."),
    "code-character": N_("{value} holds {character}, which no bottle code does. Type it anew."),
    "code-check": N_("{value} is no bottle code: its last character does not fit. Type it anew."),
    "unknown-bottle": N_("No bottle {value} is known here. Check the code, or send and fetch."),
    "unknown-number": N_(
        "No bottle was received under the number {value}. Check it against the receipt list."
    ),
    "disagree": N_("Number {value} was given to bottle {right}, not {bottle}. Put one right."),
    "analyte": N_("{value} is no analyte known here. Write lead (Pb) or copper (Cu)."),
    "value-blank": N_("No value stands here; blank is not zero. Write ND or < and the limit."),
    "value-number": N_("{value} is no level. Write a number, < and a number, or ND."),
    "value-negative": N_("{value} is below zero. Write ND or < and the limit, as reported."),
    "value-thousands": N_("{value} may be two numbers. Write it without a separator, or 1.234."),
    "value-above": N_("{value} is above the instrument's range. Ask for the diluted result."),
    "value-zero-limit": N_("{value} says less than nothing. Write the limit it lies below."),
    "value-limits": N_(
        "The detection limit {value} is above the reporting limit {right}. Put one right."
    ),
    "unit-blank": N_("The unit is missing. Write ug/L or mg/L."),
    "unit": N_("{value} is no unit known here. Write ug/L or mg/L."),
    "no-time": N_("{value} is no date. Write YYYY-MM-DD, or YYYY-MM-DDTHH:MM."),
    "row-differs": N_("Row {first} gives another {analyte} level of this bottle. Keep one."),
    # notes
    "rule-outside-in-force": N_(
        "The rule {value} is in force {first} to {last}; this round runs outside that. Ask your "
        "regulator whether it holds here."
    ),
    "protocol-outside-in-force": N_(
        "The protocol {value} is in force {first} to {last}; {day} lies outside that. Ask your "
        "regulator whether it may be used."
    ),
    "convention-unsigned": N_(
        "The rule's convention is {right}, the round takes {value}. Say in convention_by which "
        "regulator allowed it and when."
    ),
    "month-not-counted": N_("Draws of {value} will not count: the months are {right}."),
    "key-left-out": N_("The key {value} means nothing here and was left out."),
    "route-empty": N_("The route {value} has no visit yet."),
    "not-utf-8": N_("The file is not UTF-8; it was read as Windows-1252. Check its signs."),
    "column-left-out": N_("The column {value} means nothing here and was left out."),
    "column-absent": N_("The file has no column {value}; it stays empty."),
    "number-unheard": N_(
        "No receipt under the number {value} has come here; the row was read by its bottle code."
    ),
    "row-again": N_("Row {first} says the same; this one was left out."),
}
