"""Corrections: new data for a recorded fact, with a reason; the old one stays, struck through.

A correction carries the whole new data and the time at which the thing was done, so nothing moves.
What may be corrected, in which fields and by whom, is the table of ``correctable.py``.
"""

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from fieldapp.commands.asked import NotYet, not_past
from fieldapp.commands.correctable import COORDINATOR, CORRECTABLE, SAMPLER, NotCorrectable, checked
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import BottleFilled, BottleSet, Done, EntryCorrected, Fact, WaterUsed
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc, in_utc
from fieldapp.projections.pages import Pages

SENTENCES = {
    "not-yours-to-correct": (
        "Whoever recorded it corrects it, or the coordinator. Tell them what is right."
    ),
    "corrected-since": (
        "It was corrected or taken back since this page was drawn. Look at what stands now."
    ),
    "correction-unsaid": "Say in a few words why it is corrected.",
    "nothing-differs": "Nothing here differs from what is recorded, so nothing was corrected.",
}
"""The sentence of each rule broken here; ``words.py`` merges them."""


class NotYoursToCorrect(RuleBroken):
    """``by`` neither recorded the entry nor is the coordinator."""

    kind = "not-yours-to-correct"


class CorrectedSince(RuleBroken):
    """The entry does not stand any more."""

    kind = "corrected-since"


class CorrectionUnsaid(RuleBroken):
    """A correction without a reason."""

    kind = "correction-unsaid"


class NothingDiffers(RuleBroken):
    """What is given is what stands."""

    kind = "nothing-differs"


def may_correct(pages: Pages, entry: Recorded, by: str) -> bool:
    """Say whether that person may correct that entry, standing or not."""
    allowed = CORRECTABLE.get(entry.fact.kind)
    row = pages.row("SELECT roles FROM p_person WHERE person = ?", (by,)) if by else None
    if allowed is None or row is None:
        return False
    first = pages.fact(pages.first_of(entry.hash)) or entry
    return COORDINATOR in row["roles"] or (allowed.role in row["roles"] and first.by == by)


def correct(
    pages: Pages,
    reading: Reading,
    *,
    of: str,
    changes: Mapping[str, Any],
    reason: str,
    by: str,
    done_at: datetime | None = None,
) -> list[Fact]:
    """Correct an entry that stands; of one corrected before, the correction.

    Args:
        of: The hash of the entry that stands.
        changes: The new values by the entry's keys; last use as ``exact``, ``at``, ``to`` (aware
            datetimes) and the rest.
        reason: Why, in the words of whoever corrects.
        done_at: When the thing was done in truth; None leaves its time as it is.

    Raises:
        NotCorrectable, NotYoursToCorrect, CorrectedSince: It may not be corrected, or not now.
        CorrectionUnsaid: No reason.
        NothingDiffers: The given values stand already.
    """
    entry = _standing(pages, of, by)
    if not reason.strip():
        raise CorrectionUnsaid()
    given = checked(pages, entry, changes) | _time(reading, entry, done_at)
    old = _whole(entry)
    if all(old.get(name, type(value)()) == value for name, value in given.items()):
        raise NothingDiffers()
    made = type(entry.fact).read({**old, **given})
    corrected = EntryCorrected(
        of=of,
        kind_=made.kind,
        data_=made.data(),
        reason=reason.strip(),
        hidden=made.private_part() or None,
    )
    return [corrected, *_set_instead(pages, entry.fact, made)]


def _time(reading: Reading, entry: Recorded, done_at: datetime | None) -> dict[str, str]:
    """Return the fields of another time; who says so is the one who said it before, if anybody."""
    if done_at is None:
        return {}
    if not_past(done_at, reading):
        raise NotYet(stated=format_utc(done_at))
    given = {"done_at": format_utc(in_utc(done_at))}
    if getattr(entry.fact, "basis", ""):
        return given
    return {**given, "basis": "stated", "told_by": SAMPLER}


def _set_instead(pages: Pages, old: Fact, new: Fact) -> list[Fact]:
    """Stand the bottle that holds the water in the place of the one that was named (R15)."""
    if not (isinstance(old, BottleFilled) and isinstance(new, BottleFilled)):
        return []
    row = pages.bottle(old.bottle)
    if old.bottle == new.bottle or row is None:
        return []
    return [
        BottleSet(
            visit=new.visit,
            bottle=new.bottle,
            draw=new.draw,
            kind_=str(row["kind"]),
            purpose=str(row["purpose"]),
            done_at=new.done_at,
            basis=new.basis,
            told_by=new.told_by,
        )
    ]


def _standing(pages: Pages, of: str, by: str) -> Recorded:
    entry = pages.fact(of, private=True)
    if entry is None:
        raise Unknown(what="entry", name=of[:8])
    if entry.fact.kind not in CORRECTABLE or not isinstance(entry.fact, Done):
        raise NotCorrectable(what=entry.fact.kind)
    if not may_correct(pages, entry, by):
        raise NotYoursToCorrect(by=by)
    if pages.gone([of]):
        raise CorrectedSince()
    return entry


def _whole(entry: Recorded) -> dict[str, Any]:
    """Return all that the entry says, its private part too, with the time it was done."""
    given = entry.fact
    return {**given.data(), **given.private_part(), "done_at": format_utc(entry.done_at)}


def differences(old: Recorded, new: Recorded) -> list[tuple[str, Any, Any]]:
    """Return what a correction says otherwise: key, old value, new value; private ones too."""
    before, after = _whole(old), _whole(new)
    skipped = {"basis", "told_by"} if not isinstance(old.fact, WaterUsed) else {"basis"}
    names = dict.fromkeys((*before, *after))
    return [
        (name, before.get(name, ""), after.get(name, ""))
        for name in names
        if name not in skipped and before.get(name) != after.get(name)
    ]
