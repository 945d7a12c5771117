"""The sentence of each rule, deviation and finding, through gettext.

Domain code names a kind with values; here stands what a person reads. A kind without a sentence
fails ``tests/test_house.py``. Sentences are short, say what to do next and never promise that
water is safe.
"""

import gettext as _gettext
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from functools import cache
from pathlib import Path
from typing import Any

from fieldapp.words.deviations import DEVIATIONS as DEVIATIONS
from fieldapp.words.findings import FINDINGS as FINDINGS
from fieldapp.words.marks import N_ as N_
from fieldapp.words.rules import RULES as RULES

TRANSLATIONS = Path(__file__).parent.parent / "translations"
_language: ContextVar[str] = ContextVar("language", default="en")


@contextmanager
def speaking(language: str) -> Iterator[None]:
    """Speak that language (``en``, ``es`` …) within the block."""
    token = _language.set(language)
    try:
        yield
    finally:
        _language.reset(token)


def gettext(text: str) -> str:
    """Return the text in the language spoken now; the text itself where none is written yet."""
    return _catalogue(_language.get()).gettext(text)


def ngettext(one: str, many: str, number: int) -> str:
    """Return the form of the text that goes with the number."""
    return _catalogue(_language.get()).ngettext(one, many, number)


@cache
def _catalogue(language: str) -> _gettext.NullTranslations:
    return _gettext.translation("tapwitness", TRANSLATIONS, languages=[language], fallback=True)


WORDS: dict[str, str] = {
    "low": N_("bends the result low"),
    "high": N_("bends the result high"),
    "either": N_("may bend the result either way"),
    "lead": N_("lead"),
    "copper": N_("copper"),
    "in-cooler": N_("It was packed into a cooler"),
    "no-cooler": N_("It is in no cooler by the record"),
    "with-me": N_("The sampler has it, in no cooler"),
    "left-behind": N_("The sampler said that it was left behind"),
    "broken": N_("It was said to be broken"),
    "elsewhere": N_("The sampler said that it is elsewhere"),
    "seal-whole": N_("whole"),
    "seal-not-whole": N_("not whole"),
    "seal-broken": N_("The seal was not whole when it was opened"),
    "unsealed": N_("It was opened without a seal on it by the record"),
    "not-relinquished": N_("Its handover was not recorded"),
}


def say(table: Mapping[str, str], kind: str, values: Mapping[str, Any]) -> str:
    """Return the sentence of that kind with its values filled in."""
    return gettext(table[kind]).format_map(_Shown(values))


def broken(kind: str, values: Mapping[str, Any]) -> str:
    """Return the sentence of a broken rule; one for its ``why`` stands before the general one."""
    named = f"{kind}-{values.get('why', '')}"
    return say(RULES, named if named in RULES else kind, values)


def word(kind: str) -> str:
    """Return the short word for a kind; the kind itself where it has none."""
    return gettext(WORDS.get(kind, kind))


class _Shown(dict[str, Any]):
    """Values for a sentence; a missing one shows as its own name rather than breaking a page."""

    def __missing__(self, key: str) -> str:
        return f"({key})"
