"""What people may do at the Bench: receive a bottle, take a receipt back.

A bottle that stands on the counter has arrived, whatever its record says: it is received all the
same and held where something stands against it (R1, R8). Only what cannot be a bottle of ours, a
code whose check character is wrong, is not recorded.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

from fieldapp.commands import coolers
from fieldapp.commands.told import deviations_of, known
from fieldapp.domain.bottles import in_order
from fieldapp.domain.cards import is_card
from fieldapp.domain.codes import normalise
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import (
    BottleReceived,
    CoolerOpened,
    EntryCorrected,
    EntryWithdrawn,
    Fact,
)
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc
from fieldapp.projections import facts, rounds
from fieldapp.projections.pages import Pages, Row

OUTCOMES = ("accepted", "held", "refused")

CHECKS = {
    "leaks": "tight",
    "cracked": "whole",
    "label": "label",
    "low": "volume",
    "cap": "cap",
    "record": "record",
    "cooler": "cooler",
    "hold": "held",
    "other": "other",
}
"""What the clerk sees wrong, and the check of the receipt list that it fails.

``cooler`` is a bottle that another cooler should hold; ``hold`` is the clerk's own word for one
that is set aside without a fault of the list.

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


class NumberIsCard(RuleBroken):
    """A card of the counter was scanned where the laboratory's number belongs."""

    kind = "number-is-card"


class NothingToTakeBack(RuleBroken):
    """The last thing that this person did at the counter is no receipt, or was taken back."""

    kind = "nothing-to-take-back"


class TooLateToTakeBack(RuleBroken):
    """The receipt is neither the latest of that person nor younger than ten seconds."""

    kind = "too-late-to-take-back"


def receive(
    pages: Pages,
    reading: Reading,
    *,
    bottle: str,
    laboratory_number: str = "",
    counted: bool = True,
    outcome: str = "accepted",
    reason: str = "",
    checks: Sequence[str] = (),
    done_at: str = "",
    cooler: str = "",
    arrived: str = "",
) -> Decision:
    """Receive one bottle; hold it where its record or the clerk's eye finds something.

    ``outcome`` is the clerk's word; ``accepted`` becomes ``held`` where a deviation stands or one
    of the ``checks`` failed (R8). The same bottle again in the same cooler changes nothing (R14),
    and a plain second scan lifts no hold and no refusal; a fault seen later corrects the receipt.
    ``counted`` says that its number was only counted up, so it is no second sticker. ``cooler``
    is the one open on the counter; ``arrived`` says what becomes of a bottle that another cooler
    should hold: ``keep`` it here with a note, or set it ``aside``.

    Raises:
        BadCode: What was scanned is no code of ours.
        OtherCooler: By its record it lies in another cooler, and nobody said what to do.
        ReasonMissing: The clerk holds, refuses or keeps without saying why.
        NumberTaken: That laboratory number stands on another bottle.
        NumberIsCard: The laboratory number is the text of a card of the counter.
    """
    code = normalise(bottle)
    if is_card(laboratory_number):
        raise NumberIsCard(number=laboratory_number)
    row = pages.bottle(code)
    before = _standing(pages, row, cooler)
    found = Checked(outcome, tuple(checks), reason)
    if before is None:
        cooler, strayed = coolers.place_of(pages, code, cooler, arrived)
        found = found.strayed(arrived) if strayed else found
    elif _elsewhere(before, cooler):
        found = found.strayed("aside")
    laboratory = _laboratory(pages, row)
    said = _settled(pages, row, before, found)
    if before is not None and _is_again(before, cooler, "" if counted else laboratory_number):
        return _said_anew(code, before, said)
    _free_number(pages, laboratory_number, code, laboratory)
    received = BottleReceived(
        bottle=code,
        outcome=said.outcome,
        cooler=cooler,
        laboratory=laboratory,
        laboratory_number=laboratory_number,
        checks=said.failed or None,
        reason=reason,
        done_at=done_at,
    )
    return Decision((received,), {"bottle": code, "again": False, "outcome": said.outcome})


@dataclass(frozen=True, slots=True)
class Checked:
    """What the clerk says of a bottle: the outcome, the checks that failed, a reason."""

    outcome: str
    checks: tuple[str, ...] = ()
    reason: str = ""

    @property
    def failed(self) -> dict[str, str]:
        """The receipt list's checks that are not as they should be."""
        return {CHECKS[check]: check for check in self.checks}

    @property
    def plain(self) -> bool:
        """Whether the clerk only scanned it."""
        return self.outcome == "accepted" and not self.checks

    def strayed(self, arrived: str) -> "Checked":
        """Return the same of a bottle that lay in another cooler than its record says.

        Raises:
            ReasonMissing: It is kept here without a note.
        """
        if arrived == "keep" and not self.reason:
            raise ReasonMissing(outcome=arrived)
        outcome = "held" if arrived == "aside" and self.outcome == "accepted" else self.outcome
        return replace(self, outcome=outcome, checks=(*self.checks, "cooler"))


def _settled(pages: Pages, row: Row | None, before: Recorded | None, found: Checked) -> Checked:
    """Return the outcome and checks to record, those that stand on the bottle already included."""
    if found.outcome not in OUTCOMES:
        raise Unknown(what="outcome", name=found.outcome)
    if found.outcome != "accepted":
        if not (found.reason or found.checks):
            raise ReasonMissing(outcome=found.outcome)
        outcome = found.outcome
    elif before is not None and found.plain:
        outcome = _receipt(before).outcome
    else:
        sound = known(row) and not (row and row["voided"])
        seen = set(found.checks) - {"cooler"} or not sound or deviations_of(pages, row)
        outcome = "held" if seen else "accepted"
        if before is not None and _receipt(before).outcome == "refused":
            outcome = "refused"  # a fault more lifts no refusal
    earlier = tuple((_receipt(before).checks or {}).values()) if before is not None else ()
    return replace(found, outcome=outcome, checks=tuple(dict.fromkeys((*earlier, *found.checks))))


def _said_anew(code: str, before: Recorded, said: Checked) -> Decision:
    """Return the answer to a second scan: nothing new, or the receipt corrected (R14).

    The correction keeps when the bottle came; the former receipt stays, struck through.
    """
    old = _receipt(before)
    same = said.outcome == old.outcome and said.failed == dict(old.checks or {})
    if same:
        return Decision((), {"bottle": code, "again": True, "outcome": old.outcome})
    now = replace(
        old, outcome=said.outcome, checks=said.failed or None, done_at=format_utc(before.done_at)
    )
    corrected = EntryCorrected(
        of=before.hash, kind_=old.kind, data_=now.data(), reason=said.reason or old.reason
    )
    return Decision((corrected,), {"bottle": code, "again": False, "outcome": said.outcome})


def _standing(pages: Pages, row: Row | None, cooler: str) -> Recorded | None:
    """Return the receipt that a scan meets: of that cooler if there is one, else the latest."""
    if row is None or not row["received_at"]:
        return None
    found = in_order(facts.about(pages.db, f"bottle:{row['bottle']}", ("bottle.received",)))
    same = [entry for entry in found if _receipt(entry).cooler == cooler]
    latest = (same or found)[-1:]
    return pages.fact(latest[0].hash, private=True) if latest else None


def _receipt(entry: Recorded) -> BottleReceived:
    assert isinstance(entry.fact, BottleReceived)
    return entry.fact


def _is_again(before: Recorded, cooler: str, sticker: str) -> bool:
    """Say whether a scan is of the receipt that stands: same cooler, no other sticker."""
    return not _elsewhere(before, cooler) and sticker in ("", _receipt(before).laboratory_number)


def _elsewhere(before: Recorded, cooler: str) -> bool:
    """Say whether a received bottle turns up in another cooler than it was received in."""
    return bool(cooler and _receipt(before).cooler and cooler != _receipt(before).cooler)


def next_number(number: str) -> str:
    """Return the number after that one, as wide as it was; empty where nothing counts up."""
    found = re.fullmatch(r"(.*?)(\d+)(\D*)", number)
    if found is None:
        return ""
    before, digits, after = found.groups()
    return f"{before}{int(digits) + 1:0{len(digits)}d}{after}"


def take_back(pages: Pages, reading: Reading, entry: str, *, latest: str) -> list[Fact]:
    """Take a receipt or an opening back: until the next press, at least ten seconds (R45).

    ``latest`` names the latest receipt of the person who asks.

    Raises:
        Unknown: No receipt has that hash.
        TooLateToTakeBack: Another receipt followed and ten seconds are over.
    """
    found = pages.fact(entry)
    if found is None or not isinstance(found.fact, BottleReceived | CoolerOpened):
        raise Unknown(what="receipt", name=entry[:8])
    if entry != latest and reading.since(found.at) > TAKE_BACK_WITHIN:
        raise TooLateToTakeBack()
    return [EntryWithdrawn(of=entry, reason="taken back at the counter")]


def undo(pages: Pages, reading: Reading, *, person: str) -> Decision:
    """Take back the last receipt of that person, as the undo card asks (R14).

    A trigger that fires twice takes nothing more back: after the first the latest press is no
    receipt.

    Raises:
        NothingToTakeBack: The last thing that this person did here is no receipt.
    """
    last = rounds.latest_press_by(pages, person)
    if last is None or not isinstance(last.fact, BottleReceived):
        raise NothingToTakeBack()
    taken = take_back(pages, reading, last.hash, latest=last.hash)
    return Decision(taken, {"bottle": last.fact.bottle})


def _laboratory(pages: Pages, row: Row | None) -> str:
    found = pages.round(row["round"]) if row and row["round"] else None
    return str(found["laboratory"]) if found else ""


def _free_number(pages: Pages, number: str, code: str, laboratory: str) -> None:
    """Bar a number that the same laboratory gave to another bottle; two may count alike."""
    for other in pages.by_number(number) if number else ():
        if other != code and _laboratory(pages, pages.bottle(other)) == laboratory:
            raise NumberTaken(number=number, other=other)
