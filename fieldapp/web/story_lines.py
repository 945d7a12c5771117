"""The story of a bottle or a visit: every entry that touches it, in the order in which it was done.

A corrected or withdrawn entry keeps its line, struck through, with what took its place, by whom,
when and why. Residents' names and words stay away from it, so that it can be printed and shown.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from typing import Any
from zoneinfo import ZoneInfo

from fieldapp import words
from fieldapp.commands import corrections
from fieldapp.domain.bottles import in_order
from fieldapp.domain.facts import DrawPoured, EntryWithdrawn, Fact
from fieldapp.domain.facts.base import private_fields
from fieldapp.domain.recorded import Recorded
from fieldapp.projections.pages import Pages
from fieldapp.web import entry_words
from fieldapp.words import N_

FIELDS = {
    "fill": N_("how full"),
    "volume_ml": N_("millilitres"),
    "water_lot": N_("water lot"),
    "bottle": N_("bottle"),
    "answer": N_("answer"),
    "note": N_("note"),
    "how": N_("consent"),
    "name": N_("name"),
    "why": N_("why"),
    "outcome": N_("outcome"),
    "laboratory_number": N_("laboratory's number"),
    "exact": N_("how exact"),
    "from": N_("from"),
    "to": N_("to"),
    "where": N_("where"),
    "known_by": N_("how it is known"),
    "told_by": N_("on whose word"),
    "done_at": N_("done at"),
}
"""What a correction calls the fields it changes."""

WORKERS_REASONS = ("bottle.received", "analysis.decided", "cooler.reopened")
"""Kinds whose reason is a worker's about a bottle or cooler; others may hold residents' words."""


@dataclass(frozen=True, slots=True)
class Change:
    """One field that a correction changed; both values empty where they are private."""

    name: str
    old: str
    new: str


@dataclass(frozen=True, slots=True)
class Answered:
    """What took the place of an entry: a correction with its changes, or a withdrawal."""

    entry: Recorded
    by: str
    reason: str
    changes: tuple[Change, ...] = ()
    gone: bool = False

    @property
    def withdrawn(self) -> bool:
        """Nothing took its place."""
        return isinstance(self.entry.fact, EntryWithdrawn)


@dataclass(frozen=True, slots=True)
class Line:
    """One entry with all that was said of it since."""

    entry: Recorded
    says: str
    reason: str = ""
    gone: bool = False
    answers: tuple[Answered, ...] = ()
    stands: str = ""
    """The hash of what stands now and may be corrected by the reader, empty where nothing may."""


def of_bottle(pages: Pages, code: str, row: Mapping[str, Any]) -> list[Recorded]:
    """Return the entries of one bottle's way, those of other bottles beside it left out."""
    found = {one.hash: one for one in pages.story(f"bottle:{code}")}
    visits = {str(row["visit"]), str(row["printed_for"])} - {""}
    coolers = {str(getattr(one.fact, "cooler", "")) for one in found.values()} - {""}
    for visit in sorted(visits):
        for one in pages.story(f"visit:{visit}"):
            if visit == row["visit"] or one.fact.kind == "visit.planned":
                found.setdefault(one.hash, one)
    for cooler in sorted(coolers):
        found |= {one.hash: one for one in pages.story(f"cooler:{cooler}")}
    return [one for one in found.values() if _touches(one.fact, code, row)]


def of_visit(pages: Pages, visit: str) -> list[Recorded]:
    """Return the entries of one visit."""
    return pages.story(f"visit:{visit}")


def _touches(given: Fact, code: str, row: Mapping[str, Any]) -> bool:
    """Say whether an entry of its visit or cooler has to do with this bottle."""
    named = getattr(given, "bottle", "")
    if named:
        return bool(named == code)
    about = getattr(given, "about", "")
    if about.startswith("bottle:"):
        return bool(about == f"bottle:{code}")
    if isinstance(given, DrawPoured):
        return given.draw < row["draw"]  # the litres caught before it in one run
    draws = tuple(getattr(given, "draws", ()))
    planned = given.kind == "visit.planned"
    return planned or not draws or not row["draw"] or row["draw"] in draws


def lines(pages: Pages, entries: Iterable[Recorded], zone: str, reader: str) -> list[Line]:
    """Return a line for each entry that began a chain, by the time it was done."""
    ordered = in_order(entries)
    known = {one.hash for one in ordered}
    gone = pages.gone(known)
    firsts = [one for one in ordered if not one.replaces or one.replaces not in known]
    made = [_line(pages, one, gone, zone, reader) for one in firsts]
    return sorted(made, key=lambda line: line.entry.done_at)


def _line(pages: Pages, entry: Recorded, gone: Mapping[str, Any], zone: str, reader: str) -> Line:
    answers = tuple(_answers(pages, entry, zone))
    stands = [one.entry for one in answers if not one.gone and not one.withdrawn]
    last = stands[-1] if stands else (None if entry.hash in gone else entry)
    may = last is not None and corrections.may_correct(pages, last, reader)
    return Line(
        entry=entry,
        says=entry_words.says(entry, zone),
        reason=pages.reason(entry.hash) if entry.fact.kind in WORKERS_REASONS else "",
        gone=entry.hash in gone,
        answers=answers,
        stands=last.hash if last and may else "",
    )


def _answers(pages: Pages, entry: Recorded, zone: str) -> Iterable[Answered]:
    """Tell each correction of an entry and of its corrections, then each withdrawal."""
    chain = [one for one in pages.corrections(entry.hash) if one.hash != entry.hash]
    gone = pages.gone(one.hash for one in (entry, *chain))
    for one in chain:
        old = pages.fact(one.replaces, private=True)
        new = pages.fact(one.hash, private=True)
        changes = tuple(changes_of(old, new, zone)) if old and new else ()
        yield Answered(one, one.by, pages.reason(one.hash), changes, one.hash in gone)
    for one in (entry, *chain):
        row = gone.get(one.hash)
        if row and row["how"] == "withdrawn":
            withdrawal = pages.fact(row["by_hash"])
            if withdrawal:
                yield Answered(withdrawal, withdrawal.by, pages.reason(withdrawal.hash))


def changes_of(old: Recorded, new: Recorded, zone: str, *, hide: bool = True) -> Iterable[Change]:
    """Tell what a correction says otherwise; a private value is only said to differ."""
    kind, private = new.fact.kind, private_fields(type(new.fact))
    for name, before, after in corrections.differences(old, new):
        label = words.gettext(FIELDS.get(name, name))
        if hide and name in private:
            yield Change(label, "", "")
            continue
        yield Change(label, *(entry_words.value_says(kind, name, v, zone) for v in (before, after)))


def by_day(found: Sequence[Line], zone: str) -> list[tuple[date, list[Line]]]:
    """Return the lines by the local day on which it was done."""
    days: list[tuple[date, list[Line]]] = []
    for line in found:
        day = line.entry.done_at.astimezone(ZoneInfo(zone)).date()
        if not days or days[-1][0] != day:
            days.append((day, []))
        days[-1][1].append(line)
    return days
