"""Received by a laboratory that runs nothing of ours: the Desk states it from the paper (R12)."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

from fieldapp.commands.asked import NOW, When, check_past
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import EntryWithdrawn, Fact, ReceiptStated
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections import crates
from fieldapp.projections.pages import Pages

STATED = "stated"

TAKE_BACK_WITHIN = timedelta(seconds=10)
"""The least time for which a press can be taken back, though another follows it (R45)."""


@dataclass(frozen=True, slots=True)
class Document:
    """A file on this node's disk: its hash, its bytes, its media type."""

    sha256: str = ""
    n: int = 0
    media: str = ""


class NobodyNamed(RuleBroken):
    """A receipt without the name of whoever signed for it."""

    kind = "nobody-named"


class NothingCame(RuleBroken):
    """A receipt of no bottle at all."""

    kind = "nothing-came"


class NumberTwice(RuleBroken):
    """The laboratory's ``number`` stands on bottle ``other`` already."""

    kind = "number-twice"


class NotThatLate(RuleBroken):
    """The day of receipt, ``on``, lies ahead."""

    kind = "not-that-late"


def state_receipt(
    pages: Pages,
    reading: Reading,
    cooler: str,
    *,
    on: str,
    name: str,
    numbers: Mapping[str, str],
    document: Document | None = None,
    when: When = NOW,
) -> list[Fact]:
    """State that the laboratory received a cooler: day, who signed, its own numbers.

    Args:
        cooler: The cooler's id.
        on: The day on the sheet, ISO, in the round's zone.
        name: Who signed for the laboratory.
        numbers: Every bottle that came, with the laboratory's number or nothing.
        document: The signed sheet as it was kept, if there is one.
        when: The time on the sheet, where one stands there.

    Raises:
        StepOver: It was opened at the Bench, or its receipt is stated already.
        NobodyNamed, NothingCame, NumberTwice, NotThatLate: What the sheet cannot say.
    """
    check_past(when, reading)
    row = crates.cooler(pages, cooler)
    if row is None:
        raise Unknown(what="cooler", name=cooler)
    if row["state"] == "received":
        raise StepOver(at=row["stated_at"] or row["opened_at"], cooler=cooler)
    if not name.strip():
        raise NobodyNamed()
    if not numbers:
        raise NothingCame()
    _check_day(pages, reading, row["round"], on)
    cleaned = {code: number.strip() for code, number in numbers.items()}
    _check_numbers(pages, cleaned, row["round"])
    sheet = document or Document()
    given = {**when.fields(), "basis": STATED, "told_by": "laboratory"}
    return [
        ReceiptStated(
            cooler=cooler, numbers=cleaned, on=on, name=name.strip(),
            document=sheet.sha256, n=sheet.n, media=sheet.media, **given,
        )
    ]  # fmt: skip


def take_back(pages: Pages, reading: Reading, cooler: str, *, of: str, by: str) -> list[Fact]:
    """Take a stated receipt back: until this person's next press, and for ten seconds (R45).

    Raises:
        Unknown: No such statement is about this cooler.
        StepOver: It is another person's, or something followed.
    """
    entry = pages.fact(of)
    stated = isinstance(entry.fact, ReceiptStated) if entry else False
    if entry is None or not stated or f"cooler:{cooler}" not in entry.fact.subjects():
        raise Unknown(what="receipt", name=of[:8])
    last = crates.last_of(pages, by)
    follows = last is not None and last.act != entry.act
    if entry.by != by or (follows and reading.at - entry.at > TAKE_BACK_WITHIN):
        raise StepOver(at=format_utc(entry.at), cooler=cooler)
    return [EntryWithdrawn(of=of)]


def _check_day(pages: Pages, reading: Reading, round_id: str, on: str) -> None:
    round_row = pages.round(round_id) if round_id else None
    zone = ZoneInfo(str(round_row["zone"])) if round_row else ZoneInfo("UTC")
    today = reading.at.astimezone(zone).date()
    if datetime.fromisoformat(on).date() > today:
        raise NotThatLate(on=on)


def _check_numbers(pages: Pages, numbers: Mapping[str, str], round_id: str) -> None:
    """Bar a number on two bottles of one round; two laboratories may count alike."""
    given: dict[str, str] = {}
    for code, number in numbers.items():
        if not number:
            continue
        if number in given:
            raise NumberTwice(number=number, other=given[number])
        given[number] = code
        for other in pages.by_number(number):
            held = pages.bottle(other)
            if other != code and held and held["round"] == round_id:
                raise NumberTwice(number=number, other=other)
