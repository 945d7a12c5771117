"""What people may do at the Bench: receive a bottle, take a receipt back, bring in results.

A bottle that stands on the counter has arrived, whatever its record says: it is received all the
same and held where something stands against it (R1, R8). Only what cannot be a bottle of ours, a
code whose check character is wrong, is not recorded.
"""

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta
from typing import Any, Protocol

from fieldapp.domain.codes import normalise
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import (
    BottleReceived,
    EntryWithdrawn,
    Fact,
    ResultReported,
    ResultsLearned,
)
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections.pages import Pages, Row
from fieldapp.projections.rounds import deviations_on

OUTCOMES = ("accepted", "held", "refused")

CHECKS = {
    "leaks": "tight",
    "cracked": "whole",
    "label": "label",
    "low": "volume",
    "cap": "cap",
    "other": "other",
}
"""What the clerk sees wrong, and the check of the receipt list that it fails.

Source: filed custody work plans, receipt checklist (trade 4, READ S73, S76, S101).
"""

TAKE_BACK_WITHIN = timedelta(seconds=10)
"""A press may be taken back at least this long, and until the next one (R45)."""


class ReasonMissing(RuleBroken):
    """A bottle is held or refused, or a decision made, without a reason."""

    kind = "reason-missing"


class NumberTaken(RuleBroken):
    """The laboratory gave ``number`` to the bottle ``other`` before."""

    kind = "number-taken"


class TooLateToTakeBack(RuleBroken):
    """The receipt is neither the latest of that person nor younger than ten seconds."""

    kind = "too-late-to-take-back"


@dataclass(frozen=True, slots=True)
class Said:
    """The counter's answer: a word (``in``, ``hold``, ``stop``), why, and named values."""

    word: str
    why: str
    deviations: tuple[Mapping[str, Any], ...] = ()


def receive(
    pages: Pages,
    reading: Reading,
    *,
    bottle: str,
    laboratory_number: str = "",
    counted: bool = True,
    outcome: str = "accepted",
    reason: str = "",
    check: str = "",
    done_at: str = "",
) -> Decision:
    """Receive one bottle; hold it where its record or the clerk's eye finds something.

    ``outcome`` is the clerk's word; ``accepted`` becomes ``held`` where a deviation stands or a
    ``check`` failed (R8). The same bottle again changes nothing (R14), and a plain second scan
    lifts no hold and no refusal; ``counted`` says that its number was only counted up, so it is
    no second sticker.

    Raises:
        BadCode: What was scanned is no code of ours.
        ReasonMissing: The clerk holds or refuses without saying why.
        NumberTaken: That laboratory number stands on another bottle.
    """
    code = normalise(bottle)
    row = pages.bottle(code)
    settled = _standing(row, outcome, check) or _outcome(pages, row, outcome, reason, check)
    if row and _in_already(row, settled, laboratory_number, counted):
        return Decision((), {"bottle": code, "again": True, "outcome": row["outcome"]})
    laboratory = _laboratory(pages, row)
    _free_number(pages, laboratory_number, code, laboratory)
    received = BottleReceived(
        bottle=code,
        outcome=settled,
        laboratory=laboratory,
        laboratory_number=laboratory_number,
        checks={CHECKS[check]: check} if check else None,
        reason=reason,
        done_at=done_at,
    )
    return Decision((received,), {"bottle": code, "again": False, "outcome": settled})


def said_of(pages: Pages, row: Row | None, *, again: bool = False) -> Said:
    """Return what the counter is told of a bottle as its record stands now (R7, R8)."""
    if row is None or not row["received_at"]:
        return Said("stop", "not-here")
    if row["outcome"] == "refused":
        return Said("stop", "refused-again" if again else "refused")
    against = deviations_of(pages, row)
    if row["outcome"] == "held":
        return Said("hold", _why_held(row, against), against)
    if again:
        return Said("in", "again")
    return Said("in", "in" if row["filled"] else "not-filled")


def _why_held(row: Row, against: Sequence[Mapping[str, Any]]) -> str:
    if not known(row):
        return "unknown"
    if row["voided"]:
        return "voided"
    return "deviation" if against else "held"


def known(row: Row | None) -> bool:
    """Say whether this node holds the issue of that code."""
    return row is not None and bool(row["printed_for"] or row["spare"])


def deviations_of(pages: Pages, row: Row | None) -> tuple[Mapping[str, Any], ...]:
    """Return the deviations of its visit that bear on this bottle."""
    if row is None or not row["visit"]:
        return ()
    return deviations_on(pages.visit(row["visit"]), row)


def next_number(number: str) -> str:
    """Return the number after that one, as wide as it was; empty where nothing counts up."""
    found = re.fullmatch(r"(.*?)(\d+)(\D*)", number)
    if found is None:
        return ""
    before, digits, after = found.groups()
    return f"{before}{int(digits) + 1:0{len(digits)}d}{after}"


def take_back(pages: Pages, reading: Reading, entry: str, *, latest: str) -> list[Fact]:
    """Take a receipt back: until the next one, and for at least ten seconds (R45).

    ``latest`` names the latest receipt of the person who asks.

    Raises:
        Unknown: No receipt has that hash.
        TooLateToTakeBack: Another receipt followed and ten seconds are over.
    """
    found = pages.fact(entry)
    if found is None or not isinstance(found.fact, BottleReceived):
        raise Unknown(what="receipt", name=entry[:8])
    if entry != latest and reading.since(found.at) > TAKE_BACK_WITHIN:
        raise TooLateToTakeBack(bottle=found.fact.bottle)
    return [EntryWithdrawn(of=entry, reason="taken back at the counter")]


def _standing(row: Row | None, outcome: str, check: str) -> str:
    """Return the outcome that a plain scan finds standing, empty where the clerk says something."""
    plain = outcome == "accepted" and not check
    return str(row["outcome"]) if row and row["received_at"] and plain else ""


def _outcome(pages: Pages, row: Row | None, outcome: str, reason: str, check: str) -> str:
    """Return the outcome to record: the clerk's own, or held where something stands against it."""
    if outcome not in OUTCOMES:
        raise Unknown(what="outcome", name=outcome)
    if outcome != "accepted":
        if not (reason or check):
            raise ReasonMissing(outcome=outcome)
        return outcome
    sound = known(row) and not (row and row["voided"])
    return "accepted" if sound and not check and not deviations_of(pages, row) else "held"


def _in_already(row: Row, outcome: str, number: str, counted: bool) -> bool:
    if not row["received_at"] or row["outcome"] != outcome:
        return False
    return counted or not number or number == row["laboratory_number"]


def _laboratory(pages: Pages, row: Row | None) -> str:
    found = pages.round(row["round"]) if row and row["round"] else None
    return str(found["laboratory"]) if found else ""


def _free_number(pages: Pages, number: str, code: str, laboratory: str) -> None:
    """Bar a number that the same laboratory gave to another bottle; two may count alike."""
    for other in pages.by_number(number) if number else ():
        if other != code and _laboratory(pages, pages.bottle(other)) == laboratory:
            raise NumberTaken(number=number, other=other)


class ReadRow(Protocol):
    """One row of a results file that was read without a fault (``reading.results.ResultRow``)."""

    def reported(self, file: str) -> ResultReported:
        """Return the fact of this row; ``file`` is the SHA-256 of the file as it came."""


def import_results(
    pages: Pages,
    reading: Reading,
    rows: Iterable[ReadRow],
    *,
    file_sha: str,
    round_id: str = "",
    way: str = "file",
) -> list[Fact]:
    """Return the facts of a results file: that it came to hand, and each row not reported yet.

    The same file again gives nothing. A changed value is reported beside the former one, and a
    result for a bottle that was never received is kept: both become findings.
    """
    said: dict[str, set[tuple[str, ...]]] = {}
    new: list[Fact] = []
    for row in rows:
        given = row.reported(file_sha)
        if given.bottle not in said:
            said[given.bottle] = _said_before(pages, given.bottle)
        if _says(given) not in said[given.bottle]:
            said[given.bottle].add(_says(given))
            new.append(given)
    if not new:
        return []
    learned_at = format_utc(reading.at)
    return [ResultsLearned(way=way, learned_at=learned_at, file=file_sha, round=round_id), *new]


def _said_before(pages: Pages, bottle: str) -> set[tuple[str, ...]]:
    entries = pages.story(f"bottle:{bottle}")
    gone = pages.gone(entry.hash for entry in entries)
    return {
        _says(entry.fact)
        for entry in entries
        if entry.hash not in gone and isinstance(entry.fact, ResultReported)
    }


def _says(given: ResultReported) -> tuple[str, ...]:
    """Return what a row says, whichever file and row it stands in."""
    return (
        given.analyte, given.value, given.unit, given.qualifier, given.detection,
        given.reporting, given.method, given.analysed_at, str(given.provisional),
    )  # fmt: skip
