"""The sentence of each finding."""

from fieldapp.words.marks import N_

FINDINGS: dict[str, str] = {
    "two-codes-one-draw": N_(
        "Visit {visit} at {site} holds two codes for draw {draw}: {codes}. Void the one that "
        "is on no bottle."
    ),
    "filled-not-received": N_(
        "Bottle {bottle} was filled at {site} and has not been received; due {due}. {last}."
    ),
    "other-cooler": N_("Bottle {bottle} was packed into cooler {packed} and arrived in {box}."),
    "seal-differs": N_(
        "Cooler {box}, {day}: the seals put on were {put_on}; the laboratory read {read}, {whole}."
    ),
    "count-differs": N_(
        "Cooler {box}, {day}: the laboratory counted {counted} bottles, the record has {packed}."
    ),
    "custody-gap": N_(
        "Cooler {box}, {day}: nothing shows who kept it from {since} to {until}. {why}."
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
    "stand-too-short": N_(
        "The water at {site} stood {stood_s} before the draw; the protocol asks for {minimum_s}."
    ),
    "bottles-swapped": N_(
        "Two bottles changed places: {bottle}, printed for {printed}, was filled at {filled}, and"
        " {other}, printed for {filled}, at {printed}."
    ),
}
