"""What a press becomes: facts, and the answer that a repeated press gets again."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from fieldapp.domain.facts.base import Fact


@dataclass(frozen=True)
class Decision:
    """The facts to record and a small answer of plain values; ``next`` is where to go."""

    facts: Sequence[Fact]
    answer: Mapping[str, Any] = field(default_factory=dict)
