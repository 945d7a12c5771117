"""Byte forms shared by all of the record: base64url without padding, one certain JSON."""

import base64
import binascii
import json
import re
import unicodedata
from collections.abc import Mapping
from typing import Any, NoReturn

from sync.errors import BadEntry, Unwritable

LARGEST_INTEGER = 2**53 - 1  # what every JSON reader keeps exactly (RFC 7493 section 2.2)
LAST_BMP = "\uffff"
B64_TEXT = re.compile(r"[A-Za-z0-9_-]*")


def b64(raw: bytes) -> str:
    """Return base64url text without padding (RFC 4648 section 5)."""
    return base64.urlsafe_b64encode(raw).decode("ascii").rstrip("=")


def unb64(text: str) -> bytes:
    """Return the bytes of base64url text without padding.

    Raises:
        ValueError: Not base64url, padded, or with stray bits: one text for one value.
    """
    if not isinstance(text, str) or not B64_TEXT.fullmatch(text):
        raise ValueError("This is not base64url text without padding.")
    try:
        raw = base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))
    except binascii.Error as fault:
        raise ValueError("This base64url text is cut short.") from fault
    if b64(raw) != text:
        raise ValueError("This base64url text has stray bits at its end.")
    return raw


def write_json(value: Mapping[str, Any]) -> bytes:
    """Return one line of JSON in the one form we sign: keys sorted, no blanks, UTF-8.

    Raises:
        Unwritable: A float, none, an integer of 2**53 or more, text not in NFC, an odd key.

    Source:
        Equal to RFC 8785 for what is let through; its input rules are RFC 7493 (I-JSON).
    """
    _check_value(value, "")
    line = json.dumps(value, ensure_ascii=False, sort_keys=True, separators=(",", ":"))
    return line.encode("utf-8")


def read_json(buffer: bytes) -> dict[str, Any]:
    """Parse a signed JSON object, refusing what two readers could read in two ways.

    Raises:
        BadEntry: Not UTF-8, not JSON, not an object, a key twice, NaN, or half a character.
    """
    try:
        value = json.loads(
            buffer.decode("utf-8"), object_pairs_hook=_once_each, parse_constant=_no_constant
        )
        if b"\\ud" in buffer.lower():  # only an escape can name half a character
            json.dumps(value, ensure_ascii=False).encode("utf-8")
    except (ValueError, RecursionError) as fault:
        raise BadEntry("its text is not plain JSON") from fault
    if not isinstance(value, dict):
        raise BadEntry("its text is not a JSON object")
    return value


def _once_each(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise ValueError("a key stands twice")
    return found


def _no_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not JSON")


def _check_value(value: object, where: str) -> None:
    if isinstance(value, str):
        _check_text(value, where)
    elif isinstance(value, int):  # booleans are integers and always small enough
        if abs(value) > LARGEST_INTEGER:
            raise Unwritable(f"{where or 'The fact'}: write {value} as text, it is too large.")
    elif isinstance(value, Mapping):
        for key, inner in value.items():
            _check_key(key, where)
            _check_value(inner, f"{where}.{key}" if where else key)
    elif isinstance(value, list | tuple):
        for index, inner in enumerate(value):
            _check_value(inner, f"{where}[{index}]")
    else:
        raise Unwritable(
            f"{where or 'The fact'}: {type(value).__name__} cannot be signed. "
            "Write decimals as text and leave out what is not known."
        )


def _check_key(key: object, where: str) -> None:
    if not isinstance(key, str):
        raise Unwritable(f"{where or 'The fact'}: the key {key!r} must be text.")
    # Beyond the BMP RFC 8785 and Python sort differently; no key of ours goes there.
    if any(letter > LAST_BMP for letter in key):
        raise Unwritable(f"{where or 'The fact'}: the key {key!r} holds an odd character.")
    _check_text(key, where)


def _check_text(text: str, where: str) -> None:
    if any("\ud800" <= letter <= "\udfff" for letter in text):
        raise Unwritable(f"{where or 'The fact'}: half a character cannot be written as UTF-8.")
    if not unicodedata.is_normalized("NFC", text):
        raise Unwritable(f"{where or 'The fact'}: the text must be normalised (NFC) first.")
