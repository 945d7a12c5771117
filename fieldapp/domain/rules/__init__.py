"""Rule documents: what counts, against which limits, and the official figure.

A document is a TOML file beside this one, with a source for every value that a jurisdiction
may set. ``keys`` reads it, ``model`` is what it says, ``answer`` reckons with it.
"""

from functools import cache
from pathlib import Path

from fieldapp.domain.errors import Unknown
from fieldapp.domain.rules.answer import (
    Answer,
    Candidate,
    Entered,
    Period,
    Reason,
    official,
    ranked,
)
from fieldapp.domain.rules.keys import BadRule
from fieldapp.domain.rules.model import Limit, Rule, parse

__all__ = [
    "Answer",
    "BadRule",
    "Candidate",
    "Entered",
    "Limit",
    "Period",
    "Reason",
    "Rule",
    "all_rules",
    "load",
    "official",
    "parse",
    "ranked",
]


@cache
def all_rules() -> tuple[Rule, ...]:
    """Return every rule shipped with the program, in the order of their ids."""
    documents = sorted(Path(__file__).parent.glob("*.toml"))
    return tuple(parse(document.read_text("utf-8")) for document in documents)


def load(rule: str) -> Rule:
    """Return the rule of that id.

    Raises:
        Unknown: No shipped document has it.
    """
    for one in all_rules():
        if one.id == rule:
            return one
    raise Unknown(what="rule", name=rule)
