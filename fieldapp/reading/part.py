"""One part of a JSON file, with its path and a place to put what is wrong with it.

Each reader returns an empty value where it found a fault, so that reading goes on to the next.
"""

import json
import re
import unicodedata
from collections import Counter
from collections.abc import Collection, Iterator
from dataclasses import dataclass
from datetime import date
from typing import Any

from fieldapp.reading.faults import Findings, shown
from fieldapp.words import N_

LARGEST_BYTES = 5_000_000
LONGEST_ID = 40
LONGEST_TEXT = 120
LONGEST_PRIVATE = 500

# Ids stand in addresses of pages, in scopes and on labels.
_ID = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,39}", re.ASCII)
_DAY = re.compile(r"\d{4}-\d\d-\d\d", re.ASCII)
_NOTHING = object()

# What would be right, to stand in a fault's sentence.
A_TEXT = N_("a text in quotation marks")
A_LIST = N_("a list in [ ]")
A_BLOCK = N_("a block in { }")
A_WHOLE = N_("a whole number")
A_DAY = N_("a day as YYYY-MM-DD")
A_FLAG = N_("true or false")
AN_ID = N_("an id of letters, digits, full stop, hyphen or underscore")


@dataclass(frozen=True, slots=True)
class Part:
    """A value of the file at ``path``; ``about`` is the nearest id around it."""

    value: Any
    path: str
    about: str
    findings: Findings

    def fault(self, kind: str, key: str = "", value: object = "", **values: object) -> None:
        """Add a fault at this part, or at its ``key``."""
        self.findings.add(kind, self.at(key), value, about=self.about, values=values)

    def note(self, kind: str, key: str = "", value: object = "", **values: object) -> None:
        """Add a note at this part, or at its ``key``."""
        self.findings.note(kind, self.at(key), value, about=self.about, values=values)

    def at(self, key: str) -> str:
        """Return the path of ``key`` within this part."""
        return ".".join(filter(None, (self.path, key)))

    def has(self, key: str) -> bool:
        """Say whether something stands under ``key``; null is nothing."""
        return isinstance(self.value, dict) and self.value.get(key) is not None

    def block(self, key: str) -> "Part | None":
        """Return the block under ``key``, None with a fault where there is none."""
        found = self._get(key, A_BLOCK)
        if found is _NOTHING:
            return None
        return self._block(found, self.at(key))

    def blocks(self, key: str) -> Iterator["Part"]:
        """Return the blocks of the list under ``key``."""
        for place, found in enumerate(self._list(key)):
            part = self._block(found, f"{self.at(key)}[{place}]")
            if part:
                yield part

    def words(self, key: str, known: Collection[str]) -> tuple[str, ...]:
        """Return the words of the list under ``key``, each one of ``known`` and once."""
        words: list[str] = []
        for place, found in enumerate(self._list(key)):
            here = f"{key}[{place}]"
            if not isinstance(found, str) or found not in known:
                self.fault("word", here, found, right=tuple(known))
            elif found in words:
                self.fault("word-twice", here, found)
            else:
                words.append(found)
        if self.has(key) and self.value[key] == []:
            self.fault("blank", key, right=tuple(known))
        return tuple(words)

    def wholes(self, key: str, least: int, most: int) -> tuple[int, ...]:
        """Return the whole numbers of the list under ``key`` in order, each once."""
        numbers: list[int] = []
        for place, found in enumerate(self._list(key)):
            here = f"{key}[{place}]"
            if not _whole(found) or not least <= found <= most:
                self.fault("range", here, found, least=least, most=most)
            elif found in numbers:
                self.fault("word-twice", here, found)
            else:
                numbers.append(found)
        if self.has(key) and self.value[key] == []:
            self.fault("blank", key, right=A_WHOLE)
        return tuple(sorted(numbers))

    def id(self, key: str) -> str:
        """Return the id under ``key``, empty with a fault where there is none."""
        found = self._get(key, AN_ID)
        if found is _NOTHING:
            return ""
        if not isinstance(found, str) or not _ID.fullmatch(found):
            self.fault("bad-id", key, found, most=LONGEST_ID)
            return ""
        return found

    def text(
        self, key: str, *, optional: bool = False, private: bool = False, right: str = A_TEXT
    ) -> str:
        """Return the text under ``key``, trimmed and in one Unicode form.

        The value of a private text never enters a fault.
        """
        if optional and not self.has(key):
            return ""
        found = self._get(key, right)
        if found is _NOTHING:
            return ""
        if not isinstance(found, str):
            self._no_text(key, found, private=private, right=right)
            return ""
        return self._printable(key, found, optional=optional, private=private, right=right)

    def word(self, key: str, known: Collection[str], kind: str = "word") -> str:
        """Return the word under ``key``, one of ``known``; else ``kind`` is the fault."""
        found = self._get(key, ", ".join(known))
        if found is _NOTHING:
            return ""
        if not isinstance(found, str) or found not in known:
            self.fault(kind, key, found, right=tuple(known))
            return ""
        return found

    def whole(self, key: str, least: int, most: int) -> int:
        """Return the whole number under ``key``, 0 with a fault where there is none."""
        found = self._get(key, A_WHOLE)
        if found is _NOTHING:
            return 0
        if not _whole(found) or not least <= found <= most:
            self.fault("range", key, found, least=least, most=most)
            return 0
        return int(found)

    def flag(self, key: str) -> bool:
        """Return true or false under ``key``; false where nothing stands."""
        if not self.has(key):
            return False
        found = self.value[key]
        if not isinstance(found, bool):
            self.fault("form", key, found, right=A_FLAG)
            return False
        return found

    def day(self, key: str) -> date | None:
        """Return the day under ``key``, None with a fault where there is none."""
        found = self._get(key, A_DAY)
        if found is _NOTHING:
            return None
        if not isinstance(found, str) or not _DAY.fullmatch(found):
            self.fault("form", key, found, right=A_DAY)
            return None
        try:
            return date.fromisoformat(found)
        except ValueError:
            self.fault("no-date", key, found)
            return None

    def only(self, *keys: str) -> None:
        """Note each key that means nothing here: a misspelt one must not vanish unseen."""
        for key in self.value:
            if key not in keys:
                self.note("key-left-out", "", key)

    def _get(self, key: str, right: str) -> Any:
        if self.has(key):
            return self.value[key]
        self.fault("missing", key, called=key, right=right)
        return _NOTHING

    def _list(self, key: str) -> list[Any]:
        found = self._get(key, A_LIST)
        if found is _NOTHING:
            return []
        if not isinstance(found, list):
            self.fault("form", key, found, right=A_LIST)
            return []
        return found

    def _block(self, found: Any, path: str) -> "Part | None":
        if not isinstance(found, dict):
            self.findings.add("form", path, found, about=self.about, values={"right": A_BLOCK})
            return None
        name = found.get("id")
        about = name if isinstance(name, str) and _ID.fullmatch(name) else self.about
        return Part(found, path, about, self.findings)

    def _no_text(self, key: str, found: object, *, private: bool, right: str) -> None:
        if private:
            self.fault("private-form", key, right=right)
        else:
            self.fault("form", key, found, right=right)

    def _printable(self, key: str, found: str, *, optional: bool, private: bool, right: str) -> str:
        text = tidy(found)
        most = LONGEST_PRIVATE if private else LONGEST_TEXT
        if any(not_printable(c) for c in text):
            self.fault("control", key, "" if private else text)
        elif len(text) > most:
            self.fault("too-long", key, "" if private else text, most=most)
        elif not text and not optional:
            self.fault("blank", key, right=right)
        else:
            return text
        return ""


def tidy(text: str) -> str:
    """Return a text in Unicode form C, its blanks of every kind and line ends made plain."""
    return " ".join(unicodedata.normalize("NFC", text).split())


def not_printable(character: str) -> bool:
    """Say whether a character is a control, half a pair, or none at all."""
    return unicodedata.category(character) in ("Cc", "Cs", "Cn")


def read_json(data: bytes, findings: Findings) -> Part | None:
    """Return the whole of a JSON file as one part, None with a fault where it is none."""
    text = _decoded(data, findings)
    if text is None:
        return None
    twice: list[str] = []
    try:
        value = json.loads(text, object_pairs_hook=_once(twice), parse_constant=_no_number)
    except json.JSONDecodeError as fault:
        place = {"line": fault.lineno, "column": fault.colno, "says": fault.msg}
        findings.add("not-json", values=place)
        return None
    except ValueError as fault:
        findings.add("bad-number", values={"says": shown(fault)})
        return None
    except RecursionError:
        findings.add("too-deep")
        return None
    for key in twice:
        findings.add("key-twice", value=key)
    if not isinstance(value, dict):
        findings.add("form", value=value, values={"right": A_BLOCK})
        return None
    return Part(value, "", "", findings)


def _decoded(data: bytes, findings: Findings) -> str | None:
    if len(data) > LARGEST_BYTES:
        findings.add("too-large", values={"most": f"{LARGEST_BYTES // 1_000_000} MB"})
        return None
    if not data.strip():
        findings.add("empty")
        return None
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        line = data.count(b"\n", 0, fault.start) + 1
        findings.add("encoding", values={"line": line})
        return None


def _once(twice: list[str]) -> Any:
    def block(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        made = dict(pairs)
        if len(made) < len(pairs):
            counted = Counter(name for name, _ in pairs)
            twice.extend(name for name, times in counted.items() if times > 1)
        return made

    return block


def _no_number(text: str) -> Any:
    raise ValueError(f"{text} is no number")


def _whole(found: object) -> bool:
    return isinstance(found, int) and not isinstance(found, bool)
