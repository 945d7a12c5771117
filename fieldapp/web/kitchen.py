"""The Kitchen: the day's stops, and one act a screen at the tap."""

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any

from flask import Blueprint, flash, g, redirect, render_template, request, url_for
from marshmallow import EXCLUDE, ValidationError
from werkzeug.wrappers import Response

from fieldapp.commands import crate, drawing, kitchen, running
from fieldapp.commands import last_use as statement
from fieldapp.commands.asked import When, standing_of
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import Fact
from fieldapp.domain.protocols.steps import CONSENT
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections.pages import Pages
from fieldapp.web import kitchen_forms as forms
from fieldapp.web import kitchen_pages as shown_as
from fieldapp.web import kitchen_press as pressed
from fieldapp.web import spoken
from fieldapp.web.context import load, pages, person, reading
from fieldapp.web.kitchen_press import Answer, act, act_timed, press
from fieldapp.web.scan import photographed

bp = Blueprint("kitchen", __name__, url_prefix="/kitchen")

LAST_USE = (
    "exact", "at", "to", "at_local", "to_local", "fold", "where", "told_by", "known_by", "again",
)  # fmt: skip
"""Fields of a statement of last use that its read-back carries along."""


# what is read


@bp.get("/")
def index() -> Answer:
    """Show the person's stops of today, and the routes of other days below."""
    if not person():
        return redirect(url_for("people.first", then=url_for(".index")), code=303)
    mine = [row for row in pages().routes() if row["sampler"] == person()]
    todays = [row for row in mine if row["day"] == shown_as.today(str(row["zone"] or "UTC"))]
    if len(todays) == 1:
        return _board(todays[0], [row for row in mine if row not in todays])
    return render_template("kitchen/days.html", routes=mine, todays=todays)


@bp.get("/routes/<route>")
def route(route: str) -> Answer:
    """Show the stops of one route."""
    found = pages().route(route)
    if found is None:
        raise Unknown(what="route", name=route)
    others = [row for row in pages().routes() if row["sampler"] == person()]
    return _board(found, [row for row in others if row["route"] != route])


@bp.get("/clock")
def clock() -> Response:
    """Answer this node's time as text, for a countdown that was asleep."""
    return Response(format_utc(reading().at), mimetype="text/plain")


@bp.get("/visits/<visit>")
def visit(visit: str) -> Answer:
    """Show the present step of a visit."""
    return shown_as.show_visit(visit)


@bp.get("/visits/<visit>/different")
def different(visit: str) -> Answer:
    """Offer what may be different from the protocol, leaving included."""
    return pressed.different(visit)


@bp.get("/visits/<visit>/done")
def done(visit: str) -> Answer:
    """Ask what was done already."""
    return pressed.done(visit, dict(request.args.items()))


@bp.get("/visits/<visit>/last-use")
def last_use(visit: str) -> Answer:
    """Read a statement of last use back, or ask for another one: water ran again (R4)."""
    found = shown_as.gather(visit)
    if not request.args.get("exact"):
        choices = shown_as.last_use_choices(found["zone"])
        lately = shown_as.lately(found["zone"])
        return _page("last-use", found, again="yes", says="", sent={}, lately=lately, **choices)
    try:
        form = forms.LastUseForm(unknown=EXCLUDE).load(request.args.to_dict())
        told = _read_back(form, found["zone"])
    except ValidationError:
        return redirect(url_for(".visit", visit=visit), code=303)
    except RuleBroken as fault:
        return pressed.refused(visit, fault)
    return _page("read-back", found, sent=form, **told)


# what is pressed


@bp.post("/visits/<visit>/open")
def open_visit(visit: str) -> Answer:
    """Begin the visit."""
    return act(visit, forms.WhenForm, kitchen.open_visit)


@bp.post("/visits/<visit>/resume")
def resume_visit(visit: str) -> Answer:
    """Come back to it."""
    return act(visit, forms.WhenForm, kitchen.resume_visit)


@bp.post("/visits/<visit>/leave")
def leave_visit(visit: str) -> Answer:
    """Leave it, in one press; while the water stands, the way leads on to the next stop."""
    form = load(forms.LeaveForm)
    known = form["go"] if pages().visit(form["go"]) else ""
    return act_timed(
        visit,
        lambda p, r, when: kitchen.leave_visit(
            p, r, visit, why=form["why"], reason=form["reason"], when=when
        ),
        form,
        then=known,
    )


@bp.post("/visits/<visit>/answer")
def answer(visit: str) -> Answer:
    """Record an answer; consent is a fact of its own."""
    form = load(forms.AnswerForm)
    if form["question"] == CONSENT:
        how = "spoken" if form["answer"] == "agreed" else form["answer"]
        return act_timed(
            visit, lambda p, r, when: kitchen.agree(p, r, visit, how=how, when=when), form
        )
    return act(visit, forms.AnswerForm, kitchen.answer, "question", "answer", "note")


@bp.post("/visits/<visit>/last-use")
def state_last_use(visit: str) -> Answer:
    """Record when water last ran, once it was read back."""
    form = load(forms.LastUseForm)
    zone = shown_as.zone_of(visit)
    if form["exact"] != "unknown" and form["said"] != "yes":
        try:
            at, to = (forms.moment_of(form, name, zone) for name in ("at", "to"))
            statement.bounds(form["exact"], at, to, reading())
        except RuleBroken as fault:
            return pressed.refused(visit, fault)
        asked = {name: value for name, value in form.items() if value and name in LAST_USE}
        return redirect(url_for(".last_use", visit=visit, **asked), code=303)

    def decide(p: Pages, r: Reading) -> Sequence[Fact]:
        at, to = (forms.moment_of(form, name, zone) for name in ("at", "to"))
        said = {name: form[name] for name in ("exact", "where", "told_by", "known_by")}
        return statement.state_last_use(
            p, r, visit, at=at, to=to, again=form["again"] == "yes", **said
        )

    return press(visit, decide)


@bp.post("/visits/<visit>/set")
@photographed("code", pressed.refused)
def set_bottle(visit: str) -> Answer:
    """Stand a scanned bottle in its place."""
    return act(visit, forms.SetForm, drawing.set_bottle, "code")


@bp.post("/visits/<visit>/swap")
@photographed("code", pressed.refused)
def swap_bottle(visit: str) -> Answer:
    """Take another bottle for a draw."""
    return act(visit, forms.SwapForm, drawing.swap_bottle, "draw", "code", "why")


@bp.post("/visits/<visit>/tap")
def open_tap(visit: str) -> Answer:
    """Open the tap for draws that run on."""
    return act(visit, forms.WhenForm, drawing.open_tap)


@bp.post("/visits/<visit>/stand")
def start_stand(visit: str) -> Answer:
    """Shut the tap: the stand begins."""
    return act(visit, forms.WhenForm, running.start_stand)


@bp.post("/visits/<visit>/run")
def run(visit: str) -> Answer:
    """Open the tap to waste, or close it after the run."""
    ends = request.form.get("run") == "end"
    return act(visit, forms.WhenForm, running.end_run if ends else running.start_run)


@bp.post("/visits/<visit>/ran")
def ran(visit: str) -> Answer:
    """Record a run to waste as it happened."""
    form = load(forms.RanForm)
    zone = shown_as.zone_of(visit)

    def decide(p: Pages, r: Reading) -> Sequence[Fact]:
        opened, shut = (forms.moment_of(form, name, zone) for name in ("opened", "shut"))
        return running.run_happened(p, r, visit, opened=opened, shut=shut, reason=form["reason"])

    return press(visit, decide)


@bp.post("/visits/<visit>/fill")
def fill(visit: str) -> Answer:
    """Record one filling, or all of a run as the tap is closed."""
    form = load(forms.FillForm)
    sent = request.form.to_dict()

    def decide(p: Pages, r: Reading, when: When) -> Sequence[Fact]:
        draws = standing_of(p, visit, r).due.draws
        return drawing.fill(p, r, visit, fills=forms.drawn_of(sent, draws), when=when)

    return act_timed(visit, decide, form)


@bp.post("/visits/<visit>/blank")
@photographed("code", pressed.refused)
def blank(visit: str) -> Answer:
    """Pour the field blank."""
    return act(visit, forms.BlankForm, drawing.blank, "water_lot", "code")


@bp.post("/visits/<visit>/different")
def state_deviation(visit: str) -> Answer:
    """Record what was different."""
    form = load(forms.DifferentForm)
    draws = [int(one) for one in request.form.getlist("draws") if one.isdecimal()]
    return act_timed(
        visit,
        lambda p, r, when: kitchen.state_deviation(
            p, r, visit, kind=form["deviation"], draws=draws, reason=form["reason"], when=when
        ),
        form,
    )


@bp.post("/visits/<visit>/done")
def already_done(visit: str) -> Answer:
    """Record what has happened as it happened (R1)."""
    form = load(forms.DoneForm)
    sent = request.form.to_dict()

    def decide(p: Pages, r: Reading, when: When) -> Sequence[Fact]:
        told = standing_of(p, visit, r)
        chosen = tuple(one.draw for one in told.draws if sent.get(f"was_{one.draw}"))
        drawn = list(forms.drawn_of(sent, chosen).values())
        kind = form["deviation"] or (told.bars[0].deviation if told.bars else "other")
        return drawing.already_done(
            p, r, visit, drawn=drawn, deviation=kind, reason=form["reason"], when=when
        )

    return act_timed(visit, decide, form)


@bp.post("/visits/<visit>/sign")
def sign(visit: str) -> Answer:
    """Sign with a typed name and, in the same press, close and count into the crate (R17)."""
    form = load(forms.SignForm)
    closing, counted = form["close"] == "yes", form["crate"]

    def decide(p: Pages, r: Reading) -> Sequence[Fact]:
        signed = kitchen.sign(p, r, visit, name=form["name"], close=closing)
        if counted is None:
            return signed
        return [*signed, *crate.count_door(p, r, visit, count=counted)]

    answer = press(visit, decide)
    if counted is not None and isinstance(answer, Response):
        _say(shown_as.short_count(visit, counted))
    return answer


@bp.post("/visits/<visit>/close")
def close(visit: str) -> Answer:
    """Close the visit."""
    return act(visit, forms.CloseForm, kitchen.close, "outcome")


@bp.post("/visits/<visit>/take-back")
def take_back(visit: str) -> Answer:
    """Take the last press back."""
    form = load(forms.TakeBackForm)
    by = person()
    return press(visit, lambda p, r: kitchen.take_back(p, r, visit, of=form["of"], by=by))


def _say(says: str) -> None:
    """Say something above the next page; nothing for nothing."""
    if says:
        flash(says)


def _page(name: str, found: Mapping[str, Any], **more: Any) -> str:
    return render_template(f"kitchen/{name}.html", spoken=spoken, **{**found, **more})


def _board(row: Any, others: Sequence[Any]) -> str:
    stops = shown_as.stops_of(row["route"])
    rings = shown_as.rings_of(stops)
    ring = rings[0] if rings else None
    g.zone = row["zone"] or "UTC"
    return render_template(
        "kitchen/route.html",
        route=row,
        zone=g.zone,
        stops=stops,
        others=others,
        going=shown_as.next_of(stops),
        ring=ring,
        crate=shown_as.crate_of(row["route"]),
        rings=rings,
        stand_there=shown_as.ring_before(ring["earliest"]) if ring else None,
        today=shown_as.today(g.zone),
        spoken=spoken,
    )


def _read_back(form: dict[str, Any], zone: str) -> dict[str, Any]:
    """Return how long ago a statement puts the last use; the shortest counts."""
    at, to = (forms.moment_of(form, name, zone) for name in ("at", "to"))
    limits = statement.bounds(form["exact"], at, to, reading())
    if limits is None:
        raise statement.NothingSaid()
    now: datetime = reading().at
    return {"at": at, "to": to, "shortest": now - limits[1], "longest": now - limits[0]}
