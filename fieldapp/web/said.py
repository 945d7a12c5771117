"""What Bench and Desk say of entries, findings, deviations and the figure, in short words."""

from collections.abc import Mapping
from datetime import datetime
from decimal import Decimal
from typing import Any

from fieldapp import words
from fieldapp.domain.codes import grouped
from fieldapp.domain.facts import Done
from fieldapp.domain.recorded import Recorded
from fieldapp.projections.pages import Row
from fieldapp.web import shown
from fieldapp.words import N_

OUTCOMES = {
    "accepted": N_("in"),
    "held": N_("held"),
    "refused": N_("refused"),
    "": N_("not received"),
}

CHECKS = {
    "leaks": N_("it leaks"),
    "cracked": N_("it is cracked"),
    "label": N_("its label cannot be read"),
    "low": N_("too little water"),
    "cap": N_("its cap is loose or missing"),
    "record": N_("no record came with it"),
    "cooler": N_("its record names another cooler"),
    "hold": N_("set aside by the clerk"),
    "other": N_("something else"),
}

SEEN = {check: says for check, says in CHECKS.items() if check not in ("cooler", "hold")}
"""What a clerk may choose from a list: not the checks that the counter finds by itself."""

VOIDED = {
    "broken": N_("broken"),
    "lost": N_("lost"),
    "misprinted": N_("misprinted"),
    "replaced": N_("replaced"),
    "other": N_("another reason"),
}

KINDS = {
    "first-draw": N_("first litre"),
    "sequential": N_("litre of a run"),
    "flushed": N_("flushed"),
    "random-daytime": N_("random daytime"),
    "blank": N_("field blank"),
    "duplicate": N_("duplicate"),
    "": "",
}

PURPOSES = {
    "compliance": N_("compliance"),
    "investigation": N_("investigation"),
    "request": N_("resident's request"),
    "blank": N_("blank"),
    "duplicate": N_("duplicate"),
}

LEFT_OUT = {
    "blank": N_("a field blank never enters"),
    "duplicate": N_("a duplicate never enters"),
    "not-compliance": N_("not drawn for compliance"),
    "draw-not-counted": N_("the rule does not count this draw"),
    "invalidated": N_("invalidated by the regulator in writing"),
    "superseded": N_("another result of this bottle took its place"),
    "not-analysed": N_("decided before any result: not analysed"),
    "breach": N_("the rule does not count a breach of protocol"),
    "refused": N_("refused at the laboratory"),
    "not-received": N_("not received yet"),
    "no-result": N_("no result yet"),
    "date-unknown": N_("its day of collection is not known yet"),
    "outside-period": N_("collected outside the period"),
    "outside-months": N_("collected in a month that does not count"),
    "pair-incomplete": N_("half of a pair is missing; nothing stands in for it"),
    "lower-of-pair": N_("the lower of the pair; the higher entered"),
    "lower-of-same-draw": N_("the lower of two results of one draw"),
}

RANKED_AS = {
    "measured": N_("as measured"),
    "below-detection": N_("below detection: as zero"),
    "less-than": N_("less than: as zero"),
    "limit": N_("less than: as that limit"),
    "half-pql": N_("as half the quantitation level"),
}

CONVENTIONS = {
    "interpolate": N_("between the two neighbouring ranks"),
    "half-up": N_("to the nearest rank, a half upward"),
    "half-even": N_("to the nearest rank, a half to the even one"),
    "ceiling": N_("to the next rank up"),
}

BASES = {
    "": N_("pressed"),
    "measured": N_("measured"),
    "clocked": N_("clocked"),
    "stated": N_("stated"),
    "metered": N_("metered"),
    "paper": N_("paper"),
}

VERDICTS = {
    "fails": N_("too short"),
    "ask": N_("may be too short"),
    "long": N_("long"),
    "passes": "",
    "": "",
}

WITHHELD = {
    "low": N_("{n} that bends low"),
    "high": N_("{n} that bends high"),
    "either": N_("{n} that may bend either way"),
    "none": N_("{n} without a known direction"),
}

FILLS = {
    "line": N_("to the line"),
    "below": N_("below the line"),
    "over": N_("over the line"),
    "spilled": N_("spilled"),
}


def of(table: Mapping[str, str], kind: str) -> str:
    """Return the words for a kind; the kind itself where a newer program wrote it."""
    return words.gettext(table[kind]) if table.get(kind) else ("" if kind in table else kind)


def deviation(found: Mapping[str, Any]) -> str:
    """Return the sentence of a deviation, its direction after it."""
    kind, values = str(found["kind"]), dict(found.get("values") or {})
    says = words.say(words.DEVIATIONS, kind, values) if kind in words.DEVIATIONS else kind
    return f"{says} ({words.word(str(found['bias']))})"


def finding(row: Row, zone: str, now: datetime) -> str:
    """Return the sentence of a finding, its instants by the clocks of the round."""
    what, _, name = str(row["about"]).partition(":")
    values = {
        what: grouped(name) if what == "bottle" else name,
        "site": row["site"] or words.gettext("an unknown site"),
        **{key: _value(key, given, zone, now) for key, given in row["says"].items()},
    }
    kind = str(row["kind"])
    return words.say(words.FINDINGS, kind, values) if kind in words.FINDINGS else kind


def _value(name: str, given: Any, zone: str, now: datetime) -> str:
    if name in ("due", "until", "since"):
        return shown.clock(str(given), zone, now)
    if name.endswith("_s") and isinstance(given, int):
        return shown.hours(given)
    if name == "other":
        return grouped(str(given))
    if name == "day":
        return shown.day(str(given)) if given else words.gettext("on an unknown day")
    if name == "codes":
        return ", ".join(grouped(str(code)) for code in given)
    if isinstance(given, list):
        return ", ".join(str(one) for one in given if one) or words.gettext("none")
    return words.word(str(given))


def withheld(counts: Mapping[str, int]) -> str:
    """Return how many bottles were not analysed by decision, by the direction of their bias."""
    parts = [of(WITHHELD, bias).format(n=counts[bias]) for bias in WITHHELD if bias in counts]
    return ", ".join(parts)


def basis(recorded: Recorded) -> str:
    """Return on whose word an entry stands: pressed, stated by somebody, or from paper."""
    given = recorded.fact
    if not isinstance(given, Done):
        return ""
    who = given.told_by or given.writer
    said = of(BASES, given.basis)
    return f"{said} ({who})" if who else said


def stand(visit: Mapping[str, Any]) -> str:
    """Return how long the water stood and how that is known, as ``6 h 40, stated``."""
    if visit["stand_shortest_s"] is None:
        return ""
    shortest, longest = (
        shown.hours(visit[name]) for name in ("stand_shortest_s", "stand_longest_s")
    )
    length = shortest if shortest == longest else f"{shortest} – {longest}"
    said = f"{length}, {of(BASES, visit['stand_basis'])}"
    verdict = of(VERDICTS, visit["stand_verdict"])
    return f"{said}: {verdict}" if verdict else said


def draw(bottle: Mapping[str, Any]) -> str:
    """Return which draw a bottle holds or is meant for; a spare without one says so."""
    if not bottle["draw"]:
        return words.gettext("spare") if bottle["spare"] else "–"
    return f"{bottle['draw']} {of(KINDS, bottle['kind'])}".strip()


def level(result: Mapping[str, Any]) -> str:
    """Return a reported level with its qualifier and unit, as ``< 2 µg/L``."""
    unit = str(result["unit"]).replace("ug/", "µg/")
    if result.get("qualifier") == "ND":
        return words.gettext("not detected")
    sign = "< " if result.get("qualifier") == "<" else ""
    return f"{sign}{result['value']} {unit}"


def ug_per_l(value: Decimal | None) -> str:
    """Return a level in µg/L without trailing zeros; nothing for nothing."""
    return "" if value is None else f"{value.normalize():f}"
