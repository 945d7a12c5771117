"""The Bench: one counter. A cooler is opened, its bottles scanned, each answered in one word."""

import io
from typing import Any

from flask import Blueprint, Response, flash, redirect, render_template, request, session, url_for
from marshmallow import Schema, fields, validate
from werkzeug.wrappers import Response as AnyResponse

from fieldapp import words
from fieldapp.commands import bench, coolers
from fieldapp.domain.cards import CARDS, UNDO, is_card, read_card
from fieldapp.domain.codes import BadCode, normalise
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.recorded import Reading
from fieldapp.projections import arrivals, rounds
from fieldapp.projections.pages import Pages
from fieldapp.web import cooler_words, counter, state
from fieldapp.web.context import load, pages, perform, person
from fieldapp.web.scan import photographed

bp = Blueprint("bench", __name__, url_prefix="/bench")

NUMBERINGS = ("counted", "sticker", "none")
"""Where the laboratory's number comes from: counted up, scanned from its sticker, or not given."""

UNPROCESSABLE = 422
ID = validate.Length(max=40)

Shown = AnyResponse | str | tuple[str, int] | tuple[Response, int]


class ReceiveForm(Schema):
    """One scan at the counter: a bottle or a card."""

    bottle = fields.String(required=True, validate=validate.Length(min=1, max=60))
    laboratory_number = fields.String(load_default="", validate=validate.Length(max=40))
    numbering = fields.String(load_default="counted", validate=validate.OneOf(NUMBERINGS))
    outcome = fields.String(load_default="accepted", validate=validate.OneOf(bench.OUTCOMES))
    checks = fields.String(load_default="", validate=validate.OneOf(["", *bench.CHECKS]))
    reason = fields.String(load_default="", validate=validate.Length(max=500))
    cooler = fields.String(load_default="", validate=ID)
    cards = fields.String(load_default="", validate=validate.Length(max=100))
    arrived = fields.String(load_default="", validate=validate.OneOf(["", "keep", "aside"]))


class TakeBackForm(Schema):
    """Which receipt or opening is taken back."""

    entry = fields.String(required=True, validate=validate.Length(min=43, max=43))
    cooler = fields.String(load_default="", validate=ID)


class OpenForm(Schema):
    """What is seen of a cooler before anything expected is shown."""

    seals = fields.String(load_default="", validate=validate.Length(max=300))
    whole = fields.String(required=True, validate=validate.OneOf(["whole", "broken", "none"]))
    count = fields.Integer(required=True, validate=validate.Range(min=0, max=coolers.MOST_BOTTLES))
    cooler = fields.String(load_default="", validate=ID)


@bp.get("/")
def index() -> Response | str:
    """Show the counter: the answer to the last scan, the field for the next, what came."""
    cooler = str(request.args.get("cooler", ""))
    cards = _cards(str(request.args.get("cards", "")))
    wanted = str(request.args.get("bottle", ""))
    if request.args.get("finish") == "1" and cooler:
        answer: counter.Answer | None = {"word": "finish", "why": "finish"}
    elif wanted:
        again = request.args.get("again") == "1"
        answer = counter.answer_of(wanted, again=again, cooler=cooler)
    elif taken := str(request.args.get("taken", "")):
        answer = {"word": "back", "why": "taken", "bottle": taken, "row": counter.row_of(taken)}
    else:
        answer = {"word": "card", "why": "card"} if cards else None
    return counter.show(answer, cooler=cooler, cards=cards)


def _unread(*, fault: RuleBroken) -> Shown:
    """Answer the picture of a code in which none was read; what was typed beside it stays."""
    says = words.broken(fault.kind, fault.values)
    typed = request.form.to_dict()
    form = {**typed, "cooler": typed.get("cooler", ""), "cards": typed.get("cards", "")}
    return _shown({"word": "stop", "why": fault.kind, "says": says}, form, keep=typed), (
        UNPROCESSABLE
    )


@bp.post("/receive")
@photographed("bottle", _unread, want="any")
def receive() -> Shown:
    """Receive one bottle by its code, or take a card for the next one."""
    form = load(ReceiveForm)
    session["numbering"] = form["numbering"]
    number = "" if form["numbering"] == "none" else form["laboratory_number"].strip()
    if is_card(form["bottle"]):
        return _card(form)
    if form["numbering"] == "sticker" and not number:
        return _ask_for_sticker(form)

    def decide(asked: Pages, at: Reading) -> Decision:
        decided = bench.receive(
            asked,
            at,
            bottle=form["bottle"],
            laboratory_number=number,
            counted=form["numbering"] == "counted",
            outcome=form["outcome"],
            checks=_checks(form),
            reason=form["reason"].strip(),
            cooler=form["cooler"],
            arrived=form["arrived"],
        )
        seen = {"bottle": decided.answer["bottle"], **_place(form)}
        if decided.answer["again"]:
            seen["again"] = "1"
        return Decision(decided.facts, {**decided.answer, "next": url_for(".index", **seen)})

    try:
        return perform(decide, then=url_for(".index", **_place(form)))
    except (BadCode, bench.NumberTaken, bench.NumberIsCard, bench.ReasonMissing) as fault:
        return _refused(fault, form)
    except coolers.OtherCooler as fault:
        answer = {**counter.strayed(fault, state.zone()), "given": form}
        return _shown(answer, form), UNPROCESSABLE


@bp.post("/take-back")
def take_back() -> AnyResponse:
    """Take the last receipt or opening back."""
    form = load(TakeBackForm)

    def decide(asked: Pages, at: Reading) -> Decision:
        latest = rounds.latest_press_by(asked, person())
        return Decision(
            bench.take_back(asked, at, form["entry"], latest=latest.hash if latest else "")
        )

    gone = perform(decide, then=url_for(".index", **_place(form)))
    flash(words.gettext("Taken back. It stays in the record, struck through."))
    return gone


@bp.get("/open")
def open_form() -> str:
    """Ask for the seals and the bottles as they are seen; nothing expected is shown (R14)."""
    return render_template("bench/open.html", form={}, which=[])


@bp.post("/open")
def open_cooler() -> Shown:
    """Open a cooler as it was seen; ask which one it is where the seals do not say it."""
    form = load(OpenForm)
    seals = [] if form["whole"] == "none" else form["seals"].split(",")

    def decide(asked: Pages, at: Reading) -> Decision:
        decided = coolers.open_cooler(
            asked,
            at,
            seals=seals,
            whole=form["whole"] == "whole",
            count=form["count"],
            cooler=form["cooler"],
        )
        cooler = decided.answer.get("cooler", "")
        then = url_for(".index", cooler=cooler) if cooler else url_for(".which", **_seen(form))
        return Decision(decided.facts, {**decided.answer, "next": then})

    return perform(decide, then=url_for(".open_form"))


@bp.get("/which")
def which() -> str:
    """Ask which cooler it is, by box and day: its own seals stay unsaid until one is chosen."""
    seen = {name: str(request.args.get(name, "")) for name in ("seals", "whole", "count")}
    zone = state.zone()
    road = [(one.cooler, cooler_words.title(one, zone)) for one in arrivals.on_the_road(pages())]
    return render_template("bench/which.html", form=seen, road=road, none=coolers.NO_RECORD)


@bp.get("/cards")
def cards() -> Response:
    """Give the cards of the counter as a page to print."""
    from fieldapp.printing.cards import cards_pdf

    out = io.BytesIO()
    cards_pdf(out)
    answer = Response(out.getvalue(), mimetype="application/pdf")
    answer.headers["Content-Disposition"] = 'inline; filename="counter-cards.pdf"'
    return answer


def _card(form: dict[str, Any]) -> Shown:
    """Take a card: a fault waits for the next bottle, undo takes the last scan back."""
    card = read_card(form["bottle"])
    waiting = _cards(form["cards"])
    if not card:
        answer = {"word": "stop", "why": "strange-card", "scanned": form["bottle"].strip()}
        return _shown(answer, form), UNPROCESSABLE
    if card != UNDO:
        held = " ".join(dict.fromkeys([*waiting, CARDS[card]]))
        return redirect(url_for(".index", cards=held, **_place(form)), code=303)
    if waiting:
        answer = {"word": "back", "why": "card-back"}
        return _shown(answer, {**form, "cards": ""})

    def decide(asked: Pages, at: Reading) -> Decision:
        decided = bench.undo(asked, at, person=person())
        taken = str(decided.answer["bottle"])
        then = url_for(".index", taken=taken, **_place(form))
        return Decision(decided.facts, {**decided.answer, "next": then})

    try:
        return perform(decide, then=url_for(".index", **_place(form)))
    except bench.NothingToTakeBack as fault:
        return _shown({"word": "stop", "why": fault.kind}, form), UNPROCESSABLE


def _ask_for_sticker(form: dict[str, Any]) -> Shown:
    """Ask for the sticker's number before anything is recorded."""
    try:
        code = normalise(form["bottle"])
    except BadCode as fault:
        return _refused(fault, form)
    answer = {"word": "number", "why": "sticker", "bottle": code}
    return _shown(answer, form, keep={**form, "bottle": code})


def _refused(fault: RuleBroken, form: dict[str, Any]) -> Shown:
    """Answer a scan that was not recorded, on the counter itself, and keep what was typed."""
    why = f"code-{fault.values['why']}" if isinstance(fault, BadCode) else fault.kind
    answer = {"word": "stop", "why": why, "values": fault.values, "scanned": form["bottle"]}
    keep = {} if isinstance(fault, BadCode) else form
    return _shown(answer, form, keep=keep), UNPROCESSABLE


def _shown(
    answer: counter.Answer, form: dict[str, Any], *, keep: dict[str, Any] | None = None
) -> Any:
    """Show the counter of that form's cooler, its waiting cards still waiting."""
    return counter.show(answer, form=keep, cooler=form["cooler"], cards=_cards(form["cards"]))


def _checks(form: dict[str, Any]) -> tuple[str, ...]:
    """Return what the clerk sees wrong: by the list and by the cards."""
    return tuple(dict.fromkeys(filter(None, [form["checks"], *_cards(form["cards"])])))


def _cards(text: str) -> list[str]:
    """Return the faults that wait for the next bottle; a word that is none is left out."""
    return [word for word in dict.fromkeys(text.split()) if word in set(CARDS.values())]


def _place(form: dict[str, Any]) -> dict[str, Any]:
    return {"cooler": form["cooler"]} if form["cooler"] else {}


def _seen(form: dict[str, Any]) -> dict[str, Any]:
    return {name: str(form[name]) for name in ("seals", "whole", "count")}
