"""The counter's page as it is drawn: the answer to a scan, the cooler that is open, what came."""

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

from flask import Response, g, jsonify, render_template, session

from fieldapp import words
from fieldapp.commands import bench, told
from fieldapp.domain.codes import BadCode, grouped, normalise
from fieldapp.domain.facts import BottleReceived, CoolerOpened
from fieldapp.domain.recorded import Recorded
from fieldapp.projections import arrivals, rounds
from fieldapp.projections.pages import Row
from fieldapp.web import cooler_words, errors, said, shown, state
from fieldapp.web.context import new_act, pages, person, reading

Answer = dict[str, Any]


def show(
    answer: Answer | None,
    *,
    form: Mapping[str, Any] | None = None,
    cooler: str = "",
    cards: Sequence[str] = (),
) -> Response | str:
    """Render the counter, or for the queue's script the parts of it that changed."""
    g.zone = zone = state.zone()
    open_one = cooler_words.told(arrivals.arrival(pages(), cooler), zone) if cooler else None
    receipts = (
        list(reversed(open_one["arrival"].receipts))
        if open_one
        else rounds.latest_receipts(pages(), _midnight(zone))
    )
    listed = [_listed(entry) for entry in receipts]
    mine = _to_take_back()
    given = {
        "answer": answer,
        "form": form or {},
        "cards": list(cards),
        "cooler": open_one,
        "road": [] if cooler else arrivals.on_the_road(pages()),
        "opened": [] if cooler else arrivals.opened_since(pages(), _midnight(zone)),
        "title": cooler_words.title,
        "numbering": session.get("numbering", "counted"),
        "number": _next_number(),
        "receipts": listed,
        "awaited": _awaited({str(one["row"].get("round", "")) for one in listed}),
        "counts": rounds.counted(receipts),
        "latest": mine,
        "latest_says": _latest_words(mine, zone),
        "checks": said.SEEN,
        "said": said,
        "zone": zone,
        "now": reading().at,
    }
    if errors.wants_json():
        return _parts(given)
    return render_template("bench/counter.html", **given)


def answer_of(scanned: str, *, again: bool, cooler: str = "") -> Answer:
    """Return the answer about a bottle as its record stands now."""
    try:
        code = normalise(scanned)
    except BadCode as fault:
        return {"word": "stop", "why": f"code-{fault.values['why']}", "values": fault.values,
                "scanned": scanned}  # fmt: skip
    row = pages().bottle(code)
    answer = told.said_of(pages(), row, again=again)
    receipt: Any = rounds.receipt_of(pages(), code)
    seen = list((receipt.fact.checks or {}).values()) if receipt else []
    elsewhere = bool(receipt and cooler and receipt.fact.cooler != cooler)
    return {
        "word": answer.word,
        "why": answer.why,
        "bottle": code,
        "row": row,
        "receipt": receipt,
        "seen": seen,
        "elsewhere": elsewhere,
        "reason": receipt.fact.reason if receipt else "",
        "deviations": [said.deviation(found) for found in answer.deviations],
        "last_heard": rounds.last_heard(pages(), row["route"]) if row else "",
        "zone": state.zone(),
    }


def strayed(fault: bench.coolers.OtherCooler, zone: str) -> Answer:
    """Return the stop for a bottle that another cooler should hold, with the ways on."""
    own = arrivals.arrival(pages(), str(fault.values["cooler"]))
    return {
        "word": "stop",
        "why": f"other-cooler-{fault.values['why']}",
        "bottle": fault.values["bottle"],
        "row": pages().bottle(str(fault.values["bottle"])),
        "other": own,
        "other_title": cooler_words.title(own, zone),
    }


def _to_take_back() -> Recorded | None:
    """Return the last receipt or opening of this person, if nothing came of theirs since."""
    last = rounds.latest_press_by(pages(), person())
    return last if last and isinstance(last.fact, BottleReceived | CoolerOpened) else None


def _latest_words(entry: Recorded | None, zone: str) -> str:
    """Return in a few words what the person did last and may take back."""
    if entry is None:
        return ""
    at = shown.clock(entry.at, zone, reading().at, True)
    if isinstance(entry.fact, BottleReceived):
        says = words.gettext("{code} received {at}")
        return says.format(code=grouped(entry.fact.bottle), at=at)
    return words.gettext("Cooler opened {at}").format(at=at)


def _parts(given: dict[str, Any]) -> Response:
    answer = given["answer"] or {}
    return jsonify(
        word=answer.get("word", ""),
        why=answer.get("why", ""),
        bottle=answer.get("bottle", ""),
        number=given["number"],
        counts=given["counts"],
        cards=" ".join(given["cards"]),
        answer=render_template("bench/_answer.html", **given),
        tally=render_template("bench/_tally.html", **given),
        received=render_template("bench/_received.html", **given),
        act=new_act(),
    )


def _listed(entry: Recorded) -> dict[str, Any]:
    """Return a receipt with its bottle's row and what the counter is told of it now."""
    assert isinstance(entry.fact, BottleReceived)
    row = pages().bottle(entry.fact.bottle)
    return {"entry": entry, "row": row or {}, "told": told.said_of(pages(), row)}


def _awaited(round_ids: set[str]) -> int:
    """Return how many filled bottles of the rounds that came today are not here yet."""
    return sum(rounds.count(pages(), one, "not-received") for one in round_ids if one)


def _next_number() -> str:
    """Return the number after the last that this person gave; the clerk types the first."""
    return bench.next_number(rounds.latest_number_by(pages(), person())) if person() else ""


def _midnight(zone: str) -> datetime:
    here = reading().at.astimezone(ZoneInfo(zone))
    return here.replace(hour=0, minute=0, second=0, microsecond=0)


def row_of(code: str) -> Row:
    """Return a bottle's row, an empty one where this node knows none."""
    return pages().bottle(code) or {}
