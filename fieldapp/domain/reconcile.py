"""Findings: facts that do not agree, or an absence that can be known. Never a merge or repair.

A finding's id is made from kind, subject and the hashes of its evidence, so new evidence makes a
new finding and the former settlement stays visible beside it (design 5). A finding that time alone
can bring carries ``opens_at``: before that instant it is only something still on its way (R7).
"""

import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

from fieldapp.domain.bottles import BottleStanding
from fieldapp.domain.recorded import Recorded

DUE_WITHOUT_A_NAME = timedelta(hours=48)
"""A filled bottle is due at the laboratory within this where its round names nothing (R7, ours)."""

FINDINGS = (
    "two-codes-one-draw",
    "filled-not-received",
    "received-not-filled",
    "filled-twice",
    "received-twice",
    "unknown-bottle",
    "result-without-receipt",
    "results-differ",
    "void-but-filled",
    "corrected-twice",
    "stand-too-short",
)


@dataclass(frozen=True, slots=True)
class Finding:
    """Something that does not agree; open until a person settles it with a reason."""

    kind: str
    about: str  # subject, as bottle:…, visit:…
    evidence: tuple[str, ...]
    values: dict[str, Any] = field(default_factory=dict)
    opens_at: datetime | None = None

    @property
    def id(self) -> str:
        """First 16 hex digits of SHA-256 over kind, subject and sorted evidence (design 5)."""
        text = "\n".join([self.kind, self.about, *sorted(self.evidence)])
        return hashlib.sha256(text.encode()).hexdigest()[:16]


def about_bottle(
    told: BottleStanding,
    *,
    due: timedelta | None = None,
    visit_closed: Recorded | None = None,
) -> list[Finding]:
    """Return what does not agree about one bottle.

    ``due`` is the round's time from filling to receipt; ``visit_closed`` the closing of its visit,
    by which its absence in the sampler's record can be known.
    """
    subject = f"bottle:{told.bottle}"
    within = due if due is not None else DUE_WITHOUT_A_NAME
    checks = (
        _unknown(told, subject),
        _not_received(told, subject, within),
        _not_filled(told, subject, within, visit_closed),
        _twice(told, subject),
        _results(told, subject),
        _void(told, subject),
    )
    return [finding for found in checks for finding in found]


def two_codes(visit: str, issued: Sequence[Recorded]) -> list[Finding]:
    """Return a finding for each planned draw of the visit that holds two living codes."""
    by_draw: dict[int, list[Recorded]] = {}
    for entry in issued:
        by_draw.setdefault(getattr(entry.fact, "draw", 0), []).append(entry)
    return [
        Finding(
            "two-codes-one-draw",
            f"visit:{visit}",
            _hashes(entries),
            {"draw": draw, "codes": [getattr(entry.fact, "bottle", "") for entry in entries]},
        )
        for draw, entries in sorted(by_draw.items())
        if draw and len({getattr(entry.fact, "bottle", "") for entry in entries}) > 1
    ]


def corrected_twice(of: str, corrections: Sequence[Recorded]) -> list[Finding]:
    """Return a finding where two living corrections of one entry stand (design 5)."""
    if len(corrections) < 2:
        return []
    return [Finding("corrected-twice", f"entry:{of}", _hashes(corrections), {"entry": of[:8]})]


def _unknown(told: BottleStanding, subject: str) -> list[Finding]:
    if told.issued or not (told.receipts or told.fillings):
        return []
    evidence = (*told.receipts, *told.fillings)
    return [Finding("unknown-bottle", subject, _hashes(evidence))]


def _not_received(told: BottleStanding, subject: str, within: timedelta) -> list[Finding]:
    if not told.fillings or told.receipts or told.filled_at is None:
        return []
    opens = told.filled_at + within
    return [Finding("filled-not-received", subject, _hashes(told.fillings), {"due": opens}, opens)]


def _not_filled(
    told: BottleStanding, subject: str, within: timedelta, closed: Recorded | None
) -> list[Finding]:
    if not told.receipts or told.fillings or not told.issued:
        return []
    if told.receipt is not None and told.receipt.outcome == "refused":
        return []
    if closed is not None:
        return [Finding("received-not-filled", subject, _hashes((*told.receipts, closed)))]
    opens = told.receipts[0].done_at + within
    return [Finding("received-not-filled", subject, _hashes(told.receipts), {}, opens)]


def _twice(told: BottleStanding, subject: str) -> list[Finding]:
    found = []
    places = {(getattr(e.fact, "visit", ""), getattr(e.fact, "draw", 0)) for e in told.fillings}
    if len(told.fillings) > 1:
        found.append(
            Finding(
                "filled-twice",
                subject,
                _hashes(told.fillings),
                {"visits": sorted(map(str, places))},
            )
        )
    numbers = sorted({getattr(e.fact, "laboratory_number", "") for e in told.receipts})
    if len(told.receipts) > 1:
        found.append(
            Finding("received-twice", subject, _hashes(told.receipts), {"numbers": numbers})
        )
    return found


def _results(told: BottleStanding, subject: str) -> list[Finding]:
    found = []
    if told.results and not told.receipts:
        evidence = [entry for entries in told.results.values() for entry in entries]
        found.append(Finding("result-without-receipt", subject, _hashes(evidence)))
    for analyte, entries in sorted(told.results.items()):
        values = {(getattr(e.fact, "qualifier", ""), getattr(e.fact, "value", "")) for e in entries}
        if len(values) > 1:
            found.append(Finding("results-differ", subject, _hashes(entries), {"analyte": analyte}))
    return found


def _void(told: BottleStanding, subject: str) -> list[Finding]:
    if told.voided is None or not told.fillings:
        return []
    return [Finding("void-but-filled", subject, _hashes((told.voided, *told.fillings)))]


def _hashes(entries: Iterable[Recorded]) -> tuple[str, ...]:
    return tuple(sorted({entry.hash for entry in entries}))
