"""The Bench: one counter page. A bottle is scanned, received, and answered with a large word."""

from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

from flask import Blueprint, Response, flash, g, jsonify, render_template, request, session, url_for
from marshmallow import Schema, fields, validate
from werkzeug.wrappers import Response as AnyResponse

from fieldapp import words
from fieldapp.commands import bench
from fieldapp.domain.codes import BadCode, normalise
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import BottleReceived
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.projections import rounds
from fieldapp.projections.pages import Pages
from fieldapp.web import errors, said, state
from fieldapp.web.context import load, new_act, pages, perform, person, reading

bp = Blueprint("bench", __name__, url_prefix="/bench")

NUMBERINGS = ("counted", "sticker", "none")
"""Where the laboratory's number comes from: counted up, scanned from its sticker, or not given."""

UNPROCESSABLE = 422


class ReceiveForm(Schema):
    """One scan at the counter."""

    bottle = fields.String(required=True, validate=validate.Length(min=1, max=60))
    laboratory_number = fields.String(load_default="", validate=validate.Length(max=40))
    numbering = fields.String(load_default="counted", validate=validate.OneOf(NUMBERINGS))
    outcome = fields.String(load_default="accepted", validate=validate.OneOf(bench.OUTCOMES))
    checks = fields.String(load_default="", validate=validate.OneOf(["", *bench.CHECKS]))
    reason = fields.String(load_default="", validate=validate.Length(max=500))


class TakeBackForm(Schema):
    """Which receipt is taken back."""

    entry = fields.String(required=True, validate=validate.Length(min=43, max=43))


@bp.get("/")
def index() -> Response | str:
    """Show the counter: the answer to the last scan, the field for the next, what came today."""
    wanted = str(request.args.get("bottle", ""))
    answer = _answer(wanted, again=request.args.get("again") == "1") if wanted else None
    return _counter(answer)


@bp.post("/receive")
def receive() -> AnyResponse | str | tuple[str, int] | tuple[Response, int]:
    """Receive one bottle by its code."""
    form = load(ReceiveForm)
    session["numbering"] = form["numbering"]
    number = "" if form["numbering"] == "none" else form["laboratory_number"].strip()
    if form["numbering"] == "sticker" and not number:
        return _ask_for_sticker(form["bottle"])

    def decide(asked: Pages, at: Reading) -> Decision:
        decided = bench.receive(
            asked,
            at,
            bottle=form["bottle"],
            laboratory_number=number,
            counted=form["numbering"] == "counted",
            outcome=form["outcome"],
            check=form["checks"],
            reason=form["reason"].strip(),
        )
        seen = {"bottle": decided.answer["bottle"]}
        if decided.answer["again"]:
            seen["again"] = "1"
        return Decision(decided.facts, {**decided.answer, "next": url_for(".index", **seen)})

    try:
        return perform(decide, then=url_for(".index"))
    except (BadCode, bench.NumberTaken, bench.ReasonMissing) as fault:
        return _refused(fault, form)


@bp.post("/take-back")
def take_back() -> AnyResponse:
    """Take the last receipt back."""
    form = load(TakeBackForm)

    def decide(asked: Pages, at: Reading) -> Decision:
        latest = rounds.latest_receipt_by(asked, person())
        return Decision(
            bench.take_back(asked, at, form["entry"], latest=latest.hash if latest else "")
        )

    gone = perform(decide, then=url_for(".index"))
    flash(words.gettext("Taken back. The bottle is not received now."))
    return gone


def _ask_for_sticker(scanned: str) -> Response | str | tuple[str, int] | tuple[Response, int]:
    """Ask for the sticker's number before anything is recorded."""
    try:
        code = normalise(scanned)
    except BadCode as fault:
        return _refused(fault, {"bottle": scanned})
    answer = {"word": "number", "why": "sticker", "bottle": code}
    return _counter(answer, form={"bottle": code})


def _refused(fault: RuleBroken, form: dict[str, Any]) -> tuple[str, int] | tuple[Response, int]:
    """Answer a scan that was not recorded, on the counter itself, and keep what was typed."""
    why = f"code-{fault.values['why']}" if isinstance(fault, BadCode) else fault.kind
    answer = {"word": "stop", "why": why, "values": fault.values, "scanned": form["bottle"]}
    keep = {} if isinstance(fault, BadCode) else form
    return _counter(answer, form=keep), UNPROCESSABLE


def _answer(scanned: str, *, again: bool) -> dict[str, Any]:
    """Return the answer about a bottle as its record stands now."""
    try:
        code = normalise(scanned)
    except BadCode as fault:
        return {"word": "stop", "why": f"code-{fault.values['why']}", "values": fault.values,
                "scanned": scanned}  # fmt: skip
    row = pages().bottle(code)
    told = bench.said_of(pages(), row, again=again)
    receipt = _receipt_of(code)
    return {
        "word": told.word,
        "why": told.why,
        "bottle": code,
        "row": row,
        "receipt": receipt,
        "check": next(iter((receipt.fact.checks or {}).values()), "") if receipt else "",
        "reason": receipt.fact.reason if receipt else "",
        "deviations": [said.deviation(found) for found in told.deviations],
        "last_heard": rounds.last_heard(pages(), row["route"]) if row else "",
        "zone": state.zone(),
    }


def _receipt_of(code: str) -> Recorded | None:
    entries = pages().story(f"bottle:{code}")
    gone = pages().gone(entry.hash for entry in entries)
    mine = [
        entry
        for entry in entries
        if isinstance(entry.fact, BottleReceived) and entry.hash not in gone
    ]
    return pages().fact(mine[-1].hash, private=True) if mine else None


def _counter(
    answer: dict[str, Any] | None, *, form: dict[str, Any] | None = None
) -> Response | str:
    """Render the counter, or for the queue's script the parts of it that changed."""
    g.zone = zone = state.zone()
    receipts = rounds.latest_receipts(pages(), _midnight(zone))
    listed = [{"entry": entry, "row": _row_of(entry)} for entry in receipts]
    given = {
        "answer": answer,
        "form": form or {},
        "numbering": session.get("numbering", "counted"),
        "number": _next_number(),
        "receipts": listed,
        "awaited": _awaited({str(one["row"].get("round", "")) for one in listed}),
        "counts": rounds.counted(receipts),
        "latest": receipts[0] if receipts and receipts[0].by == person() else None,
        "checks": said.CHECKS,
        "said": said,
        "zone": zone,
        "now": reading().at,
    }
    if errors.wants_json():
        return _parts(given)
    return render_template("bench/counter.html", **given)


def _parts(given: dict[str, Any]) -> Response:
    answer = given["answer"] or {}
    return jsonify(
        word=answer.get("word", ""),
        why=answer.get("why", ""),
        bottle=answer.get("bottle", ""),
        number=given["number"],
        counts=given["counts"],
        answer=render_template("bench/_answer.html", **given),
        received=render_template("bench/_received.html", **given),
        act=new_act(),
    )


def _row_of(entry: Recorded) -> Any:
    assert isinstance(entry.fact, BottleReceived)
    return pages().bottle(entry.fact.bottle) or {}


def _awaited(round_ids: set[str]) -> int:
    """Return how many filled bottles of the rounds that came today are not here yet."""
    return sum(rounds.count(pages(), one, "not-received") for one in round_ids if one)


def _next_number() -> str:
    """Return the number after the last that this person gave; the clerk types the first."""
    return bench.next_number(rounds.latest_number_by(pages(), person())) if person() else ""


def _midnight(zone: str) -> datetime:
    here = reading().at.astimezone(ZoneInfo(zone))
    return here.replace(hour=0, minute=0, second=0, microsecond=0)
