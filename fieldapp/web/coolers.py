"""The Desk's coolers: who holds each, what arrived, and a receipt stated from paper (R12)."""

import base64
from typing import Any

from flask import Blueprint, Response, abort, g, render_template, request, send_file, url_for
from marshmallow import Schema, fields, validate
from werkzeug.wrappers import Response as AnyResponse

from fieldapp import photos, work
from fieldapp.commands import receipts
from fieldapp.commands.asked import NOW, When
from fieldapp.domain.errors import Unknown
from fieldapp.domain.facts import ReceiptStated
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.domain.timetext import format_utc, to_utc
from fieldapp.projections import crates, rounds
from fieldapp.projections.pages import Pages, Row
from fieldapp.web import custody_words, said, shown, state
from fieldapp.web.context import load, pages, perform, person, reading, store
from fieldapp.web.kitchen_forms import FOLD

bp = Blueprint("coolers", __name__, url_prefix="/desk")

TIME = r"^$|^\d\d:\d\d(:\d\d)?$"
MOST_NUMBER = 40


class ReceiptForm(Schema):
    """What the signed sheet says; ``came_CODE`` and ``number_CODE`` stand for each bottle."""

    on = fields.Date(required=True, error_messages={"invalid": "Type the day, as 2031-05-04."})
    at = fields.String(
        load_default="", validate=validate.Regexp(TIME, error="Type a time, as 11:40.")
    )
    fold = fields.String(load_default="", validate=FOLD)
    name = fields.String(load_default="", validate=validate.Length(max=120))


class TakeBackForm(Schema):
    """Which statement is taken back."""

    of = fields.String(required=True, validate=validate.Length(equal=43))


@bp.get("/rounds/<round_id>/coolers")
def of_round(round_id: str) -> str:
    """List the coolers of a round: bottles, seals, who holds each since when."""
    row = pages().round(round_id)
    if row is None:
        raise Unknown(what="round", name=round_id)
    g.zone = zone = str(row["zone"])
    found = crates.coolers(pages(), round_id=round_id)
    return render_template(
        "desk/coolers.html", round=row, coolers=found, loose=crates.loose_of(pages(), round_id),
        words=custody_words, said=said, zone=zone, now=reading().at,
    )  # fmt: skip


@bp.get("/coolers/<cooler>")
def one_cooler(cooler: str) -> str:
    """Show one cooler: its custody, its bottles, its findings, and the receipt on paper."""
    row, zone = _cooler(cooler)
    stated = _stated(cooler)
    entries = [pages().fact(one.hash, private=True) for one in pages().story(f"cooler:{cooler}")]
    now = reading().at
    return render_template(
        "desk/cooler.html", cooler=row, zone=zone, now=now, stated=stated,
        bottles=[(code, pages().bottle(code)) for code in row["bottles"]],
        entries=entries, gone=pages().gone(one.hash for one in entries if one),
        findings=[
            {**one, "sentence": said.finding(one, zone, now), "href": ""}
            for one in rounds.findings_about(pages(), f"cooler:{cooler}", now)
        ],
        names={one["person"]: one["name"] or one["person"] for one in pages().people()},
        today=now.astimezone(shown.ZoneInfo(zone)).date().isoformat(),
        words=custody_words, said=said, mine=bool(stated and stated.by == person()),
    )  # fmt: skip


@bp.post("/coolers/<cooler>/receipt")
def state_receipt(cooler: str) -> AnyResponse:
    """State that the laboratory received a cooler, from the signed sheet."""
    form = load(ReceiptForm)
    row, zone = _cooler(cooler)
    on = form["on"].isoformat()
    when = _when(on, form, zone)
    numbers = {
        code: request.form.get(f"number_{code}", "")[:MOST_NUMBER]
        for code in row["bottles"]
        if request.form.get(f"came_{code}")
    }
    sheet = _kept()
    sent = {k: v for k, v in request.form.items() if k not in ("act", "token")}

    def decide(asked: Pages, at: Reading) -> Any:
        return receipts.state_receipt(
            asked, at, cooler, on=on, name=form["name"], numbers=numbers, document=sheet, when=when
        )

    fields_sent = {**sent, "document": sheet.sha256 if sheet else ""}
    return perform(decide, then=url_for(".one_cooler", cooler=cooler), fields=fields_sent)


@bp.post("/coolers/<cooler>/take-back")
def take_back(cooler: str) -> AnyResponse:
    """Take a stated receipt back."""
    form = load(TakeBackForm)
    by = person()
    return perform(
        lambda asked, at: receipts.take_back(asked, at, cooler, of=form["of"], by=by),
        then=url_for(".one_cooler", cooler=cooler),
    )


@bp.get("/coolers/<cooler>/record.pdf")
def record(cooler: str) -> Response:
    """Give the custody record for the lid."""
    _cooler(cooler)
    made = work.do(store(), "custody", {"cooler": cooler}, work.quiet)
    return Response(
        base64.b64decode(made["pdf"]),
        mimetype="application/pdf",
        headers={"Content-Disposition": f'inline; filename="custody-{cooler}.pdf"'},
    )


@bp.get("/coolers/<cooler>/sheet")
def sheet(cooler: str) -> AnyResponse:
    """Give the signed sheet as it was kept."""
    stated = _stated(cooler)
    given = stated.fact if stated else None
    path = None
    if isinstance(given, ReceiptStated) and given.document:
        path = photos.find(given.document, store().folder)
    if path is None or not isinstance(given, ReceiptStated):
        abort(404)
    ending = "pdf" if given.media == photos.PDF else "jpg"
    return send_file(path, mimetype=given.media, download_name=f"signed-{cooler}.{ending}")


def _cooler(cooler: str) -> tuple[Row, str]:
    row = crates.cooler(pages(), cooler)
    if row is None:
        raise Unknown(what="cooler", name=cooler)
    round_row = pages().round(row["round"]) if row["round"] else None
    g.zone = str(round_row["zone"]) if round_row else state.zone()
    return row, str(g.zone)


def _stated(cooler: str) -> Recorded | None:
    entries = pages().story(f"cooler:{cooler}")
    gone = pages().gone(one.hash for one in entries)
    mine = [e for e in entries if isinstance(e.fact, ReceiptStated) and e.hash not in gone]
    return pages().fact(mine[-1].hash, private=True) if mine else None


def _when(on: str, form: dict[str, Any], zone: str) -> When:
    if not form["at"]:
        return NOW
    fold = int(form["fold"]) if form["fold"] else None
    return When(done_at=format_utc(to_utc(f"{on}T{form['at']}", zone, fold)))


def _kept() -> receipts.Document | None:
    """Keep the sheet that came with the form, before the lock; nothing where none came."""
    came = request.files.get("sheet")
    data = came.read() if came else b""
    if not data:
        return None
    kept = photos.keep_document(data, store().folder)
    return receipts.Document(kept.sha256, kept.n, kept.media)
