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

DEVIATIONS: dict[str, str] = {
    "stand-short": N_("The water stood too short before the draw"),
    "stand-doubtful": N_("The water may have stood too short before the draw"),
    "stand-long": N_("The water stood longer than the rule has in mind"),
    "stand-unknown": N_("Nobody knows how long the water stood"),
    "tap-used-in-stand": N_("Water was used while it had to stand"),
    "pre-flush": N_("The tap was flushed just before the stand"),
    "run-short": N_("The tap did not run as long as the protocol asks"),
    "aerator-cleaned": N_("The aerator was cleaned before the draw"),
    "aerator-removed": N_("The aerator was taken off for the draw"),
    "filter-in-place": N_("A filter was in the way of the water"),
    "softener-in-place": N_("A softener was in the way of the water"),
    "hot-water": N_("Hot water was drawn"),
    "not-drinking-tap": N_("The tap is not one that people drink from"),
    "plumbing-work": N_("There was work on the plumbing lately"),
    "low-flow": N_("The tap ran slower than a glass is filled"),
    "narrow-mouth": N_("The bottle's mouth is too narrow for the flow"),
    "interrupted-flow": N_("The flow was interrupted between litres"),
    "fill-below": N_("The bottle was filled below the line"),
    "fill-over": N_("The bottle was filled over the line"),
    "fill-spilled": N_("Water was spilled from the bottle"),
    "litres-shifted": N_("A litre before it was not full, so the later ones moved"),
    "wrong-order": N_("The litres were drawn out of order"),
    "wrong-bottle": N_("The bottle was printed for another draw or site"),
    "filled-twice": N_("The bottle was filled twice"),
    "poured-instead": N_("A litre that had to be kept was poured away"),
    "drawn-after-stop": N_("It was drawn although an answer had ended the visit"),
    "not-asked": N_("A question of the protocol was not asked"),
    "not-as-expected": N_("An answer was not as the protocol expects"),
    "other": N_("Something else was not as the protocol says"),
}
FINDINGS: dict[str, str] = {
    "two-codes-one-draw": N_(
        "Visit {visit} at {site} holds two codes for draw {draw}: {codes}. "
        "Void the one that is on no bottle."
    ),
    "filled-not-received": N_(
        "Bottle {bottle} was filled at {site} and has not been received; it was due {due}."
    ),
    "received-not-filled": N_(
        "Bottle {bottle} was received, but the record of its visit does not say that it was filled."
    ),
    "filled-twice": N_("Bottle {bottle} is recorded as filled more than once."),
    "received-twice": N_(
        "Bottle {bottle} is recorded as received more than once; laboratory's numbers: {numbers}."
    ),
    "unknown-bottle": N_("Bottle {bottle} is in hand, but no round here issued its code."),
    "result-without-receipt": N_("Bottle {bottle} has a result and was never received."),
    "results-differ": N_("Bottle {bottle} has results for {analyte} that differ."),
    "void-but-filled": N_("Bottle {bottle} was voided and is recorded as filled."),
    "corrected-twice": N_("Two corrections of entry {entry} stand side by side."),
    "stand-too-short": N_("The water at {site} stood too short before the draw."),
}
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
