"""The sentence of each rule, deviation and finding, through gettext.

Domain code names a kind with values; here stands what a person reads. A kind without a sentence
fails ``tests/test_vocabulary.py``. Sentences are short, say what to do next and never promise that
water is safe.
"""

import gettext as _gettext
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from pathlib import Path
from typing import Any

TRANSLATIONS = Path(__file__).parent / "translations"
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
    return _catalogue().gettext(text)


def ngettext(one: str, many: str, number: int) -> str:
    """Return the form of the text that goes with the number."""
    return _catalogue().ngettext(one, many, number)


def _catalogue() -> _gettext.NullTranslations:
    return _gettext.translation(
        "tapwitness", TRANSLATIONS, languages=[_language.get()], fallback=True
    )


def N_(text: str) -> str:
    """Mark a text for translation without translating it here."""
    return text


RULES: dict[str, str] = {
    "rule-broken": N_(
        "This cannot be recorded as it is. Go back and look at the step that is due."
    ),
    "not-due": N_("That step is not due yet. The step that is due now is shown."),
    "step-over": N_("That was recorded already at {at}. The present step is shown."),
    "unknown": N_("This device does not know {what} {name}. Send and fetch, then try again."),
    "act-differs": N_(
        "That press was recorded at {at} with other answers. Look at what stands, "
        "and correct it there if it is wrong."
    ),
    "no-person": N_("Say first who holds this device: choose your name on the first page."),
    "bad-field": N_("{field}: {says}"),
}

DEVIATIONS: dict[str, str] = {}
FINDINGS: dict[str, str] = {}
WORDS: dict[str, str] = {
    "low": N_("bends the result low"),
    "high": N_("bends the result high"),
    "either": N_("may bend the result either way"),
    "lead": N_("lead"),
    "copper": N_("copper"),
}


def say(table: Mapping[str, str], kind: str, values: Mapping[str, Any]) -> str:
    """Return the sentence of that kind with its values filled in."""
    return gettext(table[kind]).format_map(_Shown(values))


def word(kind: str) -> str:
    """Return the short word for a kind; the kind itself where it has none."""
    return gettext(WORDS.get(kind, kind))


class _Shown(dict[str, Any]):
    """Values for a sentence; a missing one shows as its own name rather than breaking a page."""

    def __missing__(self, key: str) -> str:
        return f"({key})"
