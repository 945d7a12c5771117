"""The tree of broken rules. A rule is a kind with named values; its sentence is in ``words.py``.

RuleBroken
├── codes, levels, stand, protocols, reading: each module adds its own below
├── NotDue          an act whose turn has not come, with what is due instead
├── StepOver        an act already recorded, with when
└── Unknown         a bottle, visit, cooler … that this node does not know
"""

from typing import Any, ClassVar


class RuleBroken(Exception):
    """A rule of the trade or of the house stands against this act; nothing was recorded."""

    kind: ClassVar[str] = "rule-broken"

    def __init__(self, **values: Any) -> None:
        self.values = values
        super().__init__(f"{self.kind}: {values}")


class NotDue(RuleBroken):
    """The act is not the one that is due; ``due`` says what is."""

    kind = "not-due"


class StepOver(RuleBroken):
    """The act was recorded before, at ``at``; the page that offered it is old."""

    kind = "step-over"


class Unknown(RuleBroken):
    """This node holds nothing under that name; ``what`` and ``name`` say which."""

    kind = "unknown"
