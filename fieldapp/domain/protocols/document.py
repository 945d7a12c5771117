"""Reading a protocol document key by key: every fault is collected, with its path and line."""

import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Any, Final

from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.timetext import BadDuration, parse_duration

Path = tuple[str | int, ...]

LONGEST_BYTES = 24 * 1024
"""The most that a ``protocol.kept`` entry carries (design 5)."""
ID = re.compile(r"[a-z0-9][a-z0-9-]{0,39}", re.ASCII)
AN_ID = "lower-case letters, digits and hyphens, at most 40"
REQUIRED: Final[Any] = object()

_HEADER = re.compile(r"\s*(\[\[?)\s*([\w.-]+)\s*\]\]?\s*(?:#.*)?$", re.ASCII)
_KEY = re.compile(r"\s*([\w.-]+)\s*=", re.ASCII)
_PLACE = re.compile(r"\s*\(at (?:line (\d+), column \d+|end of document)\)$")


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong: where (``step 3, fill.volume_ml``), what stands there, what would be right.

    ``rule`` is a kind: ``not-toml``, ``too-large``, ``missing``, ``unknown-key``, ``wrong-type``,
    ``not-one-of``, ``out-of-range``, ``bad-duration``, ``twice``, ``not-declared``, ``order``.
    """

    path: str
    line: int | None
    value: str
    rule: str
    right: str


class BadProtocol(RuleBroken):
    """A protocol document cannot be used; ``faults`` holds every reason at once."""

    kind = "bad-protocol"

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__(faults=self.faults)


class Sheet:
    """The document being read, the line of each key, and the faults found so far."""

    def __init__(self, text: str) -> None:
        self.faults: list[Fault] = []
        self._lines = _lines_of(text)
        self.top = Table(self._parsed(text), (), self)

    def fault(self, path: Path, value: Any, rule: str, right: str) -> None:
        """Note one fault; the line is that of the key or of the nearest table around it."""
        shown = value if isinstance(value, str) else repr(value)
        self.faults.append(Fault(shown_path(path), self._line(path), shown[:80], rule, right))

    def _line(self, path: Path) -> int | None:
        for length in range(len(path), 0, -1):
            if path[:length] in self._lines:
                return self._lines[path[:length]]
        return None

    def _parsed(self, text: str) -> dict[str, Any]:
        try:
            if len(text.encode()) > LONGEST_BYTES:
                self.fault((), len(text), "too-large", f"at most {LONGEST_BYTES} bytes")
            return tomllib.loads(text)
        except (tomllib.TOMLDecodeError, UnicodeEncodeError, RecursionError) as fault:
            place = _PLACE.search(str(fault))
            line = int(place[1]) if place and place[1] else None
            says = _PLACE.sub("", str(fault))[:120]
            raise BadProtocol([*self.faults, Fault("", line, says, "not-toml", "TOML")]) from None


class Table:
    """One table of the document; each key is asked for once, ``close`` refuses the others."""

    def __init__(self, given: Mapping[str, Any], path: Path, sheet: Sheet) -> None:
        self.path = path
        self.sheet = sheet
        self._given = dict(given)

    def names(self) -> tuple[str, ...]:
        """Return the keys not asked for yet."""
        return tuple(self._given)

    def text(self, key: str, default: str = REQUIRED, choices: Sequence[str] = ()) -> str:
        """Take a text, one of ``choices`` where there are any."""
        found = self._take(key, str, "a text", default)
        if not isinstance(found, str):
            return ""
        if choices and found not in choices and found != default:
            self._fault(key, found, "not-one-of", " | ".join(choices))
        if not found.strip() and default is REQUIRED:
            self._fault(key, found, "missing", "a text")
        return found

    def name(self, key: str, default: str = REQUIRED) -> str:
        """Take a short name that pages and entries use as an id."""
        found = self.text(key, default)
        if found and not ID.fullmatch(found):
            self._fault(key, found, "out-of-range", AN_ID)
        return found

    def whole(self, key: str, least: int, most: int, default: int = REQUIRED) -> int:
        """Take a whole number from ``least`` to ``most``."""
        right = f"a whole number from {least} to {most}"
        found = self._take(key, int, right, default)
        if not isinstance(found, int):
            return least
        if not least <= found <= most and found != default:
            self._fault(key, found, "out-of-range", right)
        return found

    def flag(self, key: str, default: bool) -> bool:
        """Take true or false."""
        found: bool = self._take(key, bool, "true | false", default)
        return found

    def day(self, key: str, *, optional: bool = False) -> date | None:
        """Take a date."""
        found: date | None = self._take(
            key, date, "a date, as 2027-11-01", None if optional else REQUIRED
        )
        return found

    def duration(self, key: str, *, optional: bool = False) -> timedelta | None:
        """Take an ISO 8601 duration of more than nothing."""
        right = "an ISO 8601 duration, as PT6H or P14D"
        found = self._take(key, str, right, None if optional else REQUIRED)
        if not isinstance(found, str):
            return None
        try:
            length = parse_duration(found)
        except BadDuration:
            length = timedelta(0)
        if length <= timedelta(0):
            self._fault(key, found, "bad-duration", right)
            return None
        return length

    def names_in(self, key: str, *, optional: bool = False) -> tuple[str, ...]:
        """Take a list of short names, none of them twice."""
        found = self._take(key, list, "a list of names", () if optional else REQUIRED)
        names = [one for one in found or () if isinstance(one, str) and ID.fullmatch(one)]
        if len(names) < len(found or ()) or (not names and not optional and found is not None):
            self._fault(key, found, "out-of-range", f"a list of names of {AN_ID}")
        if len(set(names)) < len(names):
            self._fault(key, found, "twice", "each name once")
        return tuple(dict.fromkeys(names))

    def texts_by(self, key: str, keys: Sequence[str]) -> dict[str, str]:
        """Take an optional table of texts, its keys among ``keys``."""
        inner = self.table(key, optional=True)
        if inner is None:
            return {}
        found = {name: inner.text(name) for name in inner.names() if name in keys}
        inner.close(" | ".join(keys))
        return found

    def table(self, key: str, *, optional: bool = False) -> "Table | None":
        """Take a table."""
        found = self._take(key, dict, "a table", None if optional else REQUIRED)
        return Table(found, (*self.path, key), self.sheet) if isinstance(found, dict) else None

    def tables(self, key: str) -> "list[Table]":
        """Take a list of tables; their paths count from 1."""
        found = self._take(key, list, f"at least one [[{key}]]", REQUIRED)
        made = []
        for number, one in enumerate(found or (), start=1):
            if isinstance(one, dict):
                made.append(Table(one, (*self.path, key, number), self.sheet))
            else:
                self.sheet.fault((*self.path, key, number), one, "wrong-type", "a table")
        return made

    def close(self, known: str = "") -> None:
        """Note every key that nobody asked for."""
        for key, value in self._given.items():
            self._fault(key, value, "unknown-key", known)
        self._given.clear()

    def _fault(self, key: str, value: Any, rule: str, right: str) -> None:
        self.sheet.fault((*self.path, key), value, rule, right)

    def _take(self, key: str, kind: type, right: str, default: Any) -> Any:
        if key not in self._given:
            if default is REQUIRED:
                self._fault(key, "", "missing", right)
            return None if default is REQUIRED else default
        value = self._given.pop(key)
        # type(), for a bool is an int and a date-time a date
        if type(value) is not kind:
            self._fault(key, value, "wrong-type", right)
            return None if default is REQUIRED else default
        return value


def shown_path(path: Path) -> str:
    """Return a path as a person reads it: ``step 3, fill.volume_ml``."""
    shown = ""
    for part in path:
        if isinstance(part, int):
            shown = f"{shown} {part}"
        elif shown and shown[-1].isdigit() and " " in shown:
            shown = f"{shown}, {part}"
        else:
            shown = f"{shown}.{part}" if shown else part
    return shown


def _lines_of(text: str) -> dict[Path, int]:
    """Return the line on which each key and table stands, as far as a look at each line tells."""
    found: dict[Path, int] = {}
    counts: dict[str, int] = {}
    around: Path = ()
    for number, line in enumerate(text.split("\n"), start=1):
        header, key = _HEADER.match(line), _KEY.match(line)
        if header:
            first, *rest = header[2].split(".")
            if header[1] == "[[" and not rest:
                counts[first] = counts.get(first, 0) + 1
            around = (first, counts[first], *rest) if first in counts else (first, *rest)
            found.setdefault(around, number)
        elif key:
            found.setdefault((*around, *key[1].split(".")), number)
    return found
