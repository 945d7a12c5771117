"""Findings: facts that do not agree, or an absence that can be known. Never a merge or repair.

A finding's id is made from kind, subject and the hashes of its evidence, so new evidence makes a
new finding and the former settlement stays visible beside it (design 5). A finding that time alone
can bring carries ``opens_at``: before that instant it is only something still on its way (R7).
"""

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

from fieldapp.domain.bottles import BottleStanding, in_order
from fieldapp.domain.recorded import Recorded

DUE_WITHOUT_A_NAME = timedelta(hours=48)
"""A filled bottle is due at the laboratory within this where its round names nothing (R7, ours)."""

FINDINGS = (
    "two-codes-one-draw",
    "filled-not-received",
    "other-cooler",
    "seal-differs",
    "count-differs",
    "custody-gap",
    "received-not-filled",
    "filled-twice",
    "received-twice",
    "unknown-bottle",
    "result-without-receipt",
    "results-differ",
    "void-but-filled",
    "corrected-twice",
    "stand-too-short",
    "bottles-swapped",
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
    missing_at: datetime | None = None,
    boxes: Mapping[str, str] | None = None,
) -> list[Finding]:
    """Return what does not agree about one bottle.

    ``due`` is the round's time from filling to receipt; ``visit_closed`` the closing of its visit,
    by which its absence in the sampler's record can be known; ``missing_at`` from when on it is
    known that its cooler, or every cooler of its route, came without it (R7); ``boxes`` the number
    painted on each of its coolers.
    """
    subject = f"bottle:{told.bottle}"
    within = due if due is not None else DUE_WITHOUT_A_NAME
    checks = (
        _unknown(told, subject),
        _not_received(told, subject, within, missing_at),
        _other_cooler(told, subject, boxes or {}),
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
    if told.issued or not (told.arrived or told.fillings):
        return []
    evidence = (*told.receipts, *told.stated, *told.fillings)
    return [Finding("unknown-bottle", subject, _hashes(evidence))]


def _not_received(
    told: BottleStanding, subject: str, within: timedelta, missing_at: datetime | None
) -> list[Finding]:
    """Find a filled bottle that the laboratory does not have, from when that can be known (R7).

    That is when its time is over, when its coolers came without it, or when somebody says that it
    broke: whichever is first.
    """
    if not told.fillings or told.arrived or told.filled_at is None:
        return []
    due = told.filled_at + within
    broke = [one.done_at for one in told.located[-1:] if told.whereabouts == "broken"]
    opens = min([due, *broke, *([missing_at] if missing_at else [])])
    last = told.whereabouts or ("in-cooler" if told.cooler else "no-cooler")
    evidence = (*told.fillings, *told.packings, *told.located)
    values = {"due": due, "last": last}
    return [Finding("filled-not-received", subject, _hashes(evidence), values, opens)]


def _other_cooler(told: BottleStanding, subject: str, boxes: Mapping[str, str]) -> list[Finding]:
    """Find a bottle that arrived in another cooler than the one it was last packed into."""
    named = [one for one in told.receipts if getattr(one.fact, "cooler", "")]
    came = str(getattr(named[-1].fact, "cooler", "")) if named else ""
    if not came or not told.packings or came == told.cooler:
        return []
    values = {"packed": boxes.get(told.cooler) or told.cooler, "box": boxes.get(came) or came}
    return [Finding("other-cooler", subject, _hashes((told.packings[-1], named[-1])), values)]


def _not_filled(
    told: BottleStanding, subject: str, within: timedelta, closed: Recorded | None
) -> list[Finding]:
    if not told.arrived or told.fillings or not told.issued:
        return []
    if told.receipt is not None and told.receipt.outcome == "refused":
        return []
    came = in_order((*told.receipts, *told.stated))
    if closed is not None:
        return [Finding("received-not-filled", subject, _hashes((*came, closed)))]
    opens = came[0].done_at + within
    return [Finding("received-not-filled", subject, _hashes(came), {}, opens)]


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
    # a receipt on paper and one at the Bench are one receipt, unless their numbers differ
    came = (*told.receipts, *told.stated)
    twice = max(len(told.receipts), len(told.stated), len(told.numbers)) > 1
    if twice:
        numbers = sorted(told.numbers)
        found.append(Finding("received-twice", subject, _hashes(came), {"numbers": numbers}))
    return found


def _results(told: BottleStanding, subject: str) -> list[Finding]:
    found = []
    if told.results and not told.arrived:
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
