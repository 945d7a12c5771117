"""Reading a rule document key by key; whatever nobody asked for is refused by its path."""

import datetime
from collections.abc import Mapping, Sequence
from decimal import Decimal, InvalidOperation
from typing import Any

from fieldapp.domain.errors import RuleBroken


class BadRule(RuleBroken):
    """A rule document cannot be used; ``path`` names the key, as ``limits.lead.ug_per_l``.

    ``why`` is ``unknown-key``, ``missing``, ``form`` (with ``wanted``), ``choice`` (with
    ``wanted``) or ``toml``; ``value`` is what stands there.
    """

    kind = "bad-rule"


class Keys:
    """One table of a document; every key is taken once, and ``done`` refuses the rest."""

    def __init__(self, table: Mapping[str, Any], path: str = "") -> None:
        self._table = dict(table)
        self._path = path

    def names(self) -> tuple[str, ...]:
        """Return the keys not taken yet."""
        return tuple(self._table)

    def text(self, key: str, choices: Sequence[str] = ()) -> str:
        """Take a text that is not empty, one of ``choices`` where there are any."""
        text: str = self._take(key, str, "a text")
        if choices and text not in choices:
            raise BadRule(path=self.path(key), why="choice", value=text, wanted=tuple(choices))
        if not text.strip():
            raise BadRule(path=self.path(key), why="form", value=text, wanted="a text")
        return text

    def decimal(self, key: str) -> Decimal:
        """Take a decimal of 0 or more that is written as a text."""
        text = self.text(key)
        try:
            number = Decimal(text)
        except InvalidOperation:
            number = Decimal("NaN")
        if not number.is_finite() or number < 0:
            raise BadRule(path=self.path(key), why="form", value=text, wanted='a number, as "15"')
        return number

    def whole(self, key: str) -> int:
        """Take a whole number of 0 or more."""
        number: int = self._take(key, int, "a whole number")
        if number < 0:
            raise BadRule(path=self.path(key), why="form", value=number, wanted="0 or more")
        return number

    def flag(self, key: str) -> bool:
        """Take true or false."""
        flag: bool = self._take(key, bool, "true or false")
        return flag

    def day(self, key: str) -> datetime.date | None:
        """Take a date, None when there is none."""
        if key not in self._table:
            return None
        day: datetime.date = self._take(key, datetime.date, "a date, as 2027-11-01")
        return day

    def texts(self, key: str, *, optional: bool = False) -> tuple[str, ...]:
        """Take a list of texts, empty only where it may be left out."""
        return tuple(self._list(key, str, "a list of texts", optional))

    def wholes(self, key: str) -> tuple[int, ...]:
        """Take a list of whole numbers."""
        return tuple(self._list(key, int, "a list of whole numbers", optional=False))

    def table(self, key: str) -> "Keys":
        """Take a table."""
        return Keys(self._take(key, dict, "a table"), self.path(key))

    def tables(self, key: str) -> list["Keys"]:
        """Take a list of tables; their paths count from 1."""
        found = self._list(key, dict, "tables", optional=False)
        return [Keys(table, f"{self.path(key)}[{n}]") for n, table in enumerate(found, start=1)]

    def done(self) -> None:
        """Refuse the first key that nobody took."""
        for key, value in self._table.items():
            raise BadRule(path=self.path(key), why="unknown-key", value=value)

    def path(self, key: str) -> str:
        """Return the path of a key from the document's top."""
        return f"{self._path}.{key}" if self._path else key

    def _take(self, key: str, kind: type, wanted: str) -> Any:
        if key not in self._table:
            raise BadRule(path=self.path(key), why="missing", value="", wanted=wanted)
        value = self._table.pop(key)
        # type(), for a bool is an int and a date-time a date.
        if type(value) is not kind:
            raise BadRule(path=self.path(key), why="form", value=value, wanted=wanted)
        return value

    def _list(self, key: str, kind: type, wanted: str, optional: bool) -> list[Any]:
        if optional and key not in self._table:
            return []
        found: list[Any] = self._take(key, list, wanted)
        if not found or any(type(one) is not kind for one in found):
            raise BadRule(path=self.path(key), why="form", value=found, wanted=wanted)
        return found
