"""What each kind of entry says in a line: for the story of a bottle and the evidence of a finding.

Only the signed part is spoken of; names, notes and captions are private and stay away (R6).
"""

from collections.abc import Callable, Mapping
from typing import Any

from fieldapp import words
from fieldapp.domain.codes import grouped
from fieldapp.domain.facts import Fact
from fieldapp.domain.facts.base import fields_of, private_fields
from fieldapp.domain.recorded import Recorded
from fieldapp.web import custody_words, said, shown, spoken
from fieldapp.words import N_

ENTRIES = {
    "visit.planned": N_("Planned for {site}, {tap}: {protocol}"),
    "bottle.issued": N_("Code issued{for_draw}"),
    "labels.printed": N_("Label printed, copy {copy}"),
    "bottle.voided": N_("Voided: {why}"),
    "visit.opened": N_("Visit begun"),
    "visit.left": N_("Left the house: {why}"),
    "visit.resumed": N_("Back in the house"),
    "occupant.agreed": N_("Consent of the household: {how}"),
    "question.answered": N_("Asked, {question}: {answer}"),
    "water.used": N_("Last use of water: {use}"),
    "stand.started": N_("Last tap shut; the water stands"),
    "run.started": N_("Tap opened to waste"),
    "run.ended": N_("Tap shut after running to waste"),
    "bottle.set": N_("Bottle {bottle} scanned and in its place for draw {draw}"),
    "tap.opened": N_("Tap opened for draws {draws}"),
    "tap.closed": N_("Tap closed after draws {draws}"),
    "bottle.filled": N_(
        "Filled at visit {visit}, draw {draw}: {fill}{volume_said}{lot}, in {bottle}"
    ),
    "draw.poured": N_("Draw {draw} caught and poured away: {fill}"),
    "deviation.stated": N_("Difference noted: {deviation}{of_draws}"),
    "visit.signed": N_("Signed by the {who}"),
    "visit.closed": N_("Visit closed: {outcome}"),
    "photo.taken": N_("Photo, {n} bytes, SHA-256 {photo}"),
    "crate.counted": N_("Counted into the crate: {count}"),
    "bottle.located": N_("Said to be: {how}"),
    "bottle.packed": N_("Packed into cooler {box}"),
    "cooler.sealed": N_("Cooler {box} sealed with {seals}, {count} in it"),
    "cooler.reopened": N_("Opened on the way, seals broken: {broken}"),
    "handover.offered": N_("Handed over to {to}, {count} in it, seals {seals}"),
    "handover.stated": N_("Taken by somebody without a device{waybill_said}"),
    "cooler.opened": N_(
        "Opened at the laboratory: seals read {seal_read}, {whole}; {count} counted"
    ),
    "receipt.stated": N_("Received by the laboratory on {on}, as stated from paper"),
    "bottle.received": N_("Received: {outcome}{number}{checks_said}"),
    "analysis.decided": N_("Decided: {decision}"),
    "result.reported": N_("Result: {analyte} {level}{said_provisional}"),
    "results.learned": N_("Results came to hand"),
    "finding.settled": N_("Finding settled"),
    "entry.withdrawn": N_("Taken back"),
}

HOWS = {"spoken": N_("agreed"), "signed": N_("agreed, signed"), "refused": N_("refused")}
WHOS = {"sampler": N_("sampler"), "resident": N_("resident")}

TABLES: Mapping[tuple[str, str], Mapping[str, str]] = {
    ("bottle.voided", "why"): {**spoken.VOID_WHYS, **said.VOIDED},
    ("visit.left", "why"): spoken.WHYS,
    ("occupant.agreed", "how"): HOWS,
    ("bottle.filled", "fill"): said.FILLS,
    ("draw.poured", "fill"): said.FILLS,
    ("visit.signed", "who"): WHOS,
    ("visit.closed", "outcome"): spoken.OUTCOMES,
    ("bottle.located", "how"): custody_words.WHEREABOUTS,
    ("handover.offered", "to"): custody_words.TO,
    ("bottle.received", "outcome"): said.OUTCOMES,
}
"""The words of fields that hold a kind."""


def says(entry: Recorded, zone: str = "UTC") -> str:
    """Return in a line what an entry says; the kind itself where a newer program wrote it."""
    given = entry.fact
    if given.kind not in ENTRIES:
        return given.kind
    data = signed(given)
    values = {name: value_says(given.kind, name, value, zone) for name, value in data.items()}
    values |= dict.fromkeys(ABSENT, "")
    make = MADE.get(given.kind)
    return words.say(ENTRIES, given.kind, values | (make(entry, data, zone) if make else {}))


def signed(given: Fact) -> dict[str, Any]:
    """Return every field of a fact that is not private, those at their defaults too."""
    hidden = private_fields(type(given))
    names = fields_of(type(given)).items()
    return {key: getattr(given, name) for key, name in names if name not in hidden}


ABSENT = ("for_draw", "volume_said", "lot", "number", "checks_said", "said_provisional", "of_draws")
"""Parts of a sentence that stand only where there is something to say."""


def value_says(kind: str, name: str, value: Any, zone: str = "UTC") -> str:
    """Return the words of one value of an entry."""
    table = TABLES.get((kind, name))
    if table is not None:
        return spoken.of(table, str(value))
    if name == "bottle":
        return grouped(str(value))
    if name in ("done_at", "from", "to") and value and kind != "handover.offered":
        return shown.clock(str(value), zone, None, seconds=name == "done_at")
    if isinstance(value, list | tuple):
        return ", ".join(map(str, value)) or words.gettext("none")
    if name == "volume_ml":
        return shown.ml(value) if value else words.gettext("not measured")
    return str(value)


def _issued(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    if not data.get("draw"):
        return {"for_draw": " " + words.gettext("as a spare")}
    part = words.gettext("for draw {draw} of visit {visit}, {purpose}")
    purpose = said.of(said.PURPOSES, str(data.get("purpose", "")))
    return {"for_draw": " " + part.format(**{**data, "purpose": purpose})}


def _filled(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    volume, lot = data.get("volume_ml"), data.get("water_lot")
    return {
        "volume_said": f", {shown.ml(volume)}" if volume else "",
        "lot": ", " + words.gettext("water lot {lot}").format(lot=lot) if lot else "",
    }


def _answered(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    return {name: str(data[name]).replace("-", " ") for name in ("question", "answer")}


def _used(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    return {"use": spoken.last_use(entry, zone, entry.at)}


def _deviated(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    kind, draws = str(data["deviation"]), data.get("draws") or ()
    part = words.gettext("draws {draws}").format(draws=", ".join(map(str, draws)))
    return {
        "deviation": words.say(words.DEVIATIONS, kind, {}) if kind in words.DEVIATIONS else kind,
        "of_draws": f" ({part})" if draws else "",
    }


def _received(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    checks = [said.of(said.CHECKS, check) for check in data.get("checks") or {}]
    number = str(data.get("laboratory_number", ""))
    return {"number": _number(number), "checks_said": f" ({', '.join(checks)})" if checks else ""}


def _handed(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    part = words.gettext("waybill {waybill}").format(waybill=data.get("waybill"))
    return {"waybill_said": f", {part}" if data.get("waybill") else ""}


def _opened(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    whole = words.gettext("whole") if data.get("whole") else words.gettext("not whole")
    return {"whole": whole}


def _decided(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    analyse, leave = words.gettext("analyse"), words.gettext("do not analyse")
    return {"decision": analyse if data.get("analyse") else leave}


def _reported(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    provisional = ", " + words.gettext("provisional") if data.get("provisional") else ""
    analyte = words.word(str(data["analyte"]))
    return {"analyte": analyte, "level": said.level(data), "said_provisional": provisional}


def _number(number: str) -> str:
    part = words.gettext("laboratory's number {n}").format(n=number)
    return f", {part}" if number else ""


def _boxed(entry: Recorded, data: Mapping[str, Any], zone: str) -> dict[str, str]:
    return {"box": str(data.get("box") or data["cooler"])}


MADE: Mapping[str, Callable[[Recorded, Mapping[str, Any], str], dict[str, str]]] = {
    "bottle.issued": _issued,
    "bottle.filled": _filled,
    "question.answered": _answered,
    "water.used": _used,
    "deviation.stated": _deviated,
    "bottle.received": _received,
    "bottle.packed": _boxed,
    "cooler.sealed": _boxed,
    "handover.stated": _handed,
    "cooler.opened": _opened,
    "analysis.decided": _decided,
    "result.reported": _reported,
}
"""What a kind's sentence needs besides its own fields."""
