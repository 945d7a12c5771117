"""Bottle codes: ten random characters and an eleventh that checks them.

The check is one equation over GF(32): reading from the left, ``s`` becomes twice ``s`` plus
the next character, and all eleven must end at 0. The powers of 2 there repeat only after 31
places, so every place weighs differently: one wrong character or two swapped ones never
cancel. A plain sum would miss every swap.
"""

import secrets
from collections.abc import Callable, Iterable

from fieldapp.domain.errors import RuleBroken

# Crockford's base 32: no I, L, O (they look like 1 and 0) and no U.
ALPHABET = "0123456789ABCDEFGHJKMNPQRSTVWXYZ"
RANDOM_LENGTH = 10
LENGTH = 11

# x^5 + x^2 + 1, primitive over GF(2).
_FIELD = 0b100101
_FIELD_SIZE = 32

_BLANKS_AND_HYPHENS = " \t\r\n\f\v\u00a0\u2009\u202f-\u2010\u2011\u2012\u2013\u2014"
_SMALL = "abcdefghijklmnopqrstuvwxyz"
# Only ASCII is folded: str.upper() would turn the dotless i and the sharp s into other letters.
_TYPED = str.maketrans(
    _SMALL + "OIL" + _BLANKS_AND_HYPHENS,
    _SMALL.upper().translate(str.maketrans("OIL", "011")) + "011" + "\0" * len(_BLANKS_AND_HYPHENS),
)


class BadCode(RuleBroken):
    """What was typed or scanned is no bottle code.

    ``why`` is ``character`` (with ``character`` and its ``place`` from 1), ``length`` (with
    ``length`` and ``wanted``) or ``check``; ``code`` is the text as it came.
    """

    kind = "bad-code"


def new_code(choice: Callable[[str], str] = secrets.choice) -> str:
    """Return a new bottle code of eleven characters.

    ``choice`` picks one character of a string; the default is a random source fit for secrets.
    """
    ten = "".join(choice(ALPHABET) for _ in range(RANDOM_LENGTH))
    return ten + check_character(ten)


def check_character(ten: str) -> str:
    """Return the eleventh character for the ten that a code begins with.

    Raises:
        BadCode: ``ten`` is not ten characters of the alphabet.
    """
    _require(ten, ten, RANDOM_LENGTH)
    return ALPHABET[_twice(_remainder(ten))]


def normalise(text: str) -> str:
    """Return the eleven characters of a code as typed or scanned.

    Case, blanks and hyphens do not matter; O reads as 0, and I and L as 1.

    Raises:
        BadCode: A character of no code, a wrong length, or a check that does not hold.
    """
    code = text.translate(_TYPED).replace("\0", "")
    _require(text, code, LENGTH)
    if _remainder(code):
        raise BadCode(why="check", code=text)
    return code


def grouped(code: str) -> str:
    """Return a code in the groups in which people read it: ``2HB4-X90T-C7T``."""
    return f"{code[:4]}-{code[4:8]}-{code[8:]}"


def _require(text: str, code: str, wanted: int) -> None:
    for place, character in enumerate(code, start=1):
        if character not in ALPHABET:
            raise BadCode(why="character", code=text, character=character, place=place)
    if len(code) != wanted:
        raise BadCode(why="length", code=text, length=len(code), wanted=wanted)


def _remainder(characters: Iterable[str]) -> int:
    remainder = 0
    for character in characters:
        remainder = _twice(remainder) ^ ALPHABET.index(character)
    return remainder


def _twice(element: int) -> int:
    doubled = element << 1
    return doubled ^ _FIELD if doubled >= _FIELD_SIZE else doubled
