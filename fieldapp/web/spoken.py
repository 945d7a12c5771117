"""What the Kitchen says: short words for states, answers, presses and broken rules."""

from collections.abc import Mapping, Sequence
from datetime import datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

from flask import g

from fieldapp import words
from fieldapp.commands import last_use as statement
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.protocols.standing import Deviation, Standing
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import Chip
from fieldapp.web import said, shown
from fieldapp.words import N_

WHYS = {
    "waiting": N_("The water must stand longer"),
    "nobody-home": N_("Nobody home"),
    "child-alone": N_("Only a child at home"),
    "vacant": N_("Empty, or away for days"),
    "water-off": N_("Water is off"),
    "street-works": N_("Works in the street"),
    "wrong-house": N_("Wrong house"),
    "unfit": N_("The tap is not fit"),
    "refused": N_("They say no"),
    "other": N_("Something else"),
}

OUTCOMES = {
    "done": N_("done"),
    "unfit": N_("not fit for this round"),
    "refused": N_("refused"),
    "nobody-home": N_("nobody home"),
    "vacant": N_("empty house"),
    "water-off": N_("water off"),
    "another-day": N_("another day"),
    "not-possible": N_("not possible"),
}

STATES = {
    "planned": N_("to do"),
    "open": N_("begun"),
    "left": N_("left"),
    "ready": N_("ready"),
    "closed": N_("done"),
}

ANSWERS = {
    "wait": N_("Wait until it is sure"),
    "draw-now": N_("Draw now; it is kept with that mark"),
    "another-day": N_("Come back another day"),
    "as-expected": N_("As it should be"),
    "different": N_("Different"),
}

QUESTIONS = {
    "stand-doubt": N_("It may have stood long enough, or not. Wait until it is sure?"),
    "stand-long": N_("It stood longer than usual. Draw all the same?"),
}

EXACT = {
    "at": N_("at"),
    "about": N_("about"),
    "between": N_("between two times"),
    "unknown": N_("nobody knows"),
}

PLACES = {
    "this-tap": N_("this tap"),
    "kitchen": N_("kitchen"),
    "bath": N_("bath"),
    "toilet": N_("toilet"),
    "laundry": N_("washing machine"),
    "outside": N_("outside"),
    "elsewhere": N_("elsewhere in the house"),
    "unsaid": N_("not said where"),
}

TELLERS = {
    "": N_("nobody named"),
    "sampler": N_("the sampler"),
    "resident": N_("the resident"),
    "caretaker": N_("the caretaker"),
    "neighbour": N_("a neighbour"),
    "colleague": N_("a colleague"),
}

KNOWN_BY = {
    "stated": N_("somebody said so"),
    "seen": N_("I saw it"),
    "metered": N_("read from the meter"),
}

VOID_WHYS = {
    "broken": N_("broken"),
    "lost": N_("lost"),
    "dirty": N_("dirty or opened"),
    "label": N_("label cannot be read"),
    "other": N_("something else"),
}

FILLS = {
    "line": N_("Full to the line"),
    "below": N_("Below"),
    "over": N_("Over"),
    "spilled": N_("Spilled"),
}

DEVIATIONS = {
    "stand-short": N_("Stood too short"),
    "stand-long": N_("Stood too long"),
    "stand-unknown": N_("Nobody knows how long it stood"),
    "tap-used-in-stand": N_("Water ran during the stand"),
    "pre-flush": N_("Run or flushed before"),
    "aerator-cleaned": N_("Aerator cleaned before"),
    "aerator-removed": N_("Aerator taken off now"),
    "filter-in-place": N_("Filter in place"),
    "softener-in-place": N_("Softener in place"),
    "hot-water": N_("Hot water came"),
    "plumbing-work": N_("Work on the pipes"),
    "low-flow": N_("Only a thin stream"),
    "narrow-mouth": N_("Narrow bottle"),
    "interrupted-flow": N_("The stream was interrupted"),
    "run-short": N_("Ran to waste too short"),
    "wrong-bottle": N_("A bottle of elsewhere"),
    "wrong-order": N_("Filled in another order"),
    "other": N_("Something else"),
}

BIASES = {"low": N_("reads low"), "high": N_("reads high"), "either": N_("either way")}
"""The direction in which a deviation bends the result, beside its chip."""

PRESSES = {
    "visit.opened": N_("Visit begun"),
    "visit.left": N_("Left"),
    "visit.resumed": N_("Back again"),
    "occupant.agreed": N_("Consent asked"),
    "question.answered": N_("Answered"),
    "water.used": N_("Last use noted"),
    "stand.started": N_("Tap shut"),
    "run.started": N_("Tap opened to waste"),
    "run.ended": N_("Run ended"),
    "bottle.set": N_("Bottle in place"),
    "bottle.voided": N_("Bottle exchanged"),
    "tap.opened": N_("Tap opened"),
    "tap.closed": N_("Tap closed"),
    "bottle.filled": N_("Bottle filled"),
    "draw.poured": N_("Poured away"),
    "deviation.stated": N_("Difference noted"),
    "visit.signed": N_("Signed"),
    "photo.taken": N_("Photo saved"),
    "visit.closed": N_("Visit closed"),
    "crate.counted": N_("Crate counted"),
    "bottle.located": N_("Whereabouts noted"),
    "bottle.packed": N_("Packed"),
    "cooler.sealed": N_("Sealed"),
    "cooler.reopened": N_("Opened again"),
    "handover.offered": N_("Handed over"),
    "handover.stated": N_("Handed over"),
}
"""What an undo bar calls the last press, by the kind of its first entry."""

PARTS = {
    "today": (
        (5, N_("in the night")),
        (12, N_("this morning")),
        (18, N_("this afternoon")),
        (24, N_("this evening")),
    ),
    "yesterday": (
        (5, N_("in the night before")),
        (12, N_("yesterday morning")),
        (18, N_("yesterday afternoon")),
        (24, N_("yesterday evening")),
    ),
    "before": ((24, N_("before yesterday")),),
}
"""Parts of a day in words, each with the hour at which it ends."""


def broken(fault: RuleBroken) -> str:
    """Return the sentence of a rule that a form broke; a kind may have one for each ``why``."""
    return words.broken(fault.kind, _local(fault.values))


def _local(values: Mapping[str, Any]) -> dict[str, Any]:
    zone, now = str(g.get("zone", "UTC")), g.reading.at if "reading" in g else None
    found = dict(values)
    for name, value in values.items():
        if name in ("at", "filled_at", "stated", "first", "second") and value:
            found[name] = shown.clock(value, zone, now)
        if name == "code" and isinstance(value, str) and len(value) == 11:
            found[name] = shown.code(value)
        if name == "local":
            found[name] = str(value).replace("T", " ")
    return found


def part_of_day(chip: Chip) -> str:
    """Return in words when a chip lies: ``this morning``, ``yesterday evening``."""
    hour = int(chip.local[11:13])
    return next(words.gettext(says) for until, says in PARTS[chip.day] if hour < until)


def chip_groups(chips: Sequence[Chip]) -> list[tuple[str, list[Chip]]]:
    """Return the chips by the part of the day, the latest part first, its hours in their order."""
    groups: list[tuple[str, list[Chip]]] = []
    for chip in chips:
        name = part_of_day(chip)
        if not groups or groups[-1][0] != name:
            groups.append((name, []))
        groups[-1][1].insert(0, chip)
    return groups


def stand(told: Standing, teller: str = "") -> str:
    """Return how long the water stood and how that is known; nothing while nothing is known."""
    if told.stand is None:
        return ""
    short, long = shown.hours(told.stand.shortest), shown.hours(told.stand.longest)
    length = short if short == long else f"{short} – {long}"
    basis = said.of(said.BASES, told.stand.basis)
    if told.stand.basis == "stated" and teller:
        basis = words.gettext("{basis} by {who}").format(basis=basis, who=of(TELLERS, teller))
    return f"{length}, {basis}"


def ago(minutes: int) -> str:
    """Return how long ago in words, ``just now`` for nothing."""
    return words.gettext("{n} min ago").format(n=minutes) if minutes else words.gettext("just now")


def last_use(entry: Recorded, zone: str, now: datetime) -> str:
    """Return a statement of last use in words: ``about 01:00, bath``."""
    used: Any = entry.fact
    if used.exact == "unknown":
        return of(EXACT, "unknown")
    first, last = (datetime.fromisoformat(one) for one in (used.from_, used.to))
    place = of(PLACES, used.where)
    if used.exact == "between":
        times = f"{shown.clock(first, zone, now)} – {shown.clock(last, zone, now)}"
        return f"{times}, {place}"
    # what was said lies in the middle of "about", unless that was cut at the press
    stated = first + statement.ABOUT if used.exact == "about" else first
    return f"{of(EXACT, used.exact)} {shown.clock(stated, zone, now)}, {place}"


def of(table: Mapping[str, str], kind: str) -> str:
    """Return the words for a kind; the kind itself where a newer document names it."""
    return words.gettext(table[kind]) if kind in table else kind.replace("-", " ")


def deviation(found: Deviation) -> str:
    """Return a deviation with the direction in which it bends the result, and what was said."""
    if found.kind in words.DEVIATIONS:
        says = said.deviation(
            {"kind": found.kind, "bias": found.bias, "values": _shown(found.values)}
        )
    else:
        says = f"{of(DEVIATIONS, found.kind)} ({words.word(found.bias)})"
    return says


def _shown(values: Mapping[str, Any]) -> dict[str, Any]:
    return {
        name: shown.hours(value) if isinstance(value, timedelta) else value
        for name, value in values.items()
    }


def press(entry: Recorded, zone: str) -> str:
    """Return what the undo bar says of the last press, with its second."""
    if entry.replaces:
        return f"{words.gettext('Corrected')} {entry.at.astimezone(ZoneInfo(zone)):%H:%M:%S}"
    here = entry.done_at.astimezone(ZoneInfo(zone))
    return f"{of(PRESSES, entry.fact.kind)} {here:%H:%M:%S}"


def short_of(until: datetime, now: datetime) -> timedelta:
    """Return how long it is until then, never less than nothing."""
    return max(timedelta(0), until - now)
