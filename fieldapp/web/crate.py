"""The Kitchen's crate: the day's count, packing, seals, handing over (R17)."""

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from flask import Blueprint, flash, g, render_template, request, url_for
from werkzeug.wrappers import Response

from fieldapp.commands import crate, custody
from fieldapp.commands.asked import When
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading
from fieldapp.projections import crates
from fieldapp.projections.pages import Pages, Row
from fieldapp.store import ActDiffers
from fieldapp.web import crate_forms as forms
from fieldapp.web import custody_words, said, spoken
from fieldapp.web.context import NoPerson, give_back, load, pages, perform, person
from fieldapp.web.kitchen_forms import when_of
from fieldapp.web.kitchen_pages import short_count
from fieldapp.web.scan import photographed

bp = Blueprint("crate", __name__, url_prefix="/kitchen")

Answer = Response | str | tuple[str, int]
Timed = Callable[[Pages, Reading, When], Sequence[Fact]]
UNPROCESSABLE = 422
LEFT_TO_ERRORS = (StepOver, Unknown, NoPerson, ActDiffers)
ALREADY = {
    "bottle-empty": spoken.N_("It is filled: put it in"),
    "bottles-loose": spoken.N_("It is sealed already"),
    "count-other": spoken.N_("It is sealed with that count"),
    "not-sealed": spoken.N_("It was handed over unsealed"),
}
"""What *it is already done* says beside each bar that has it (R1)."""


@bp.get("/routes/<route>/count")
def count(route: str) -> Answer:
    """Show the day's count: what is in a cooler, what is not, and the act that is due."""
    return _counted(route)


@bp.get("/coolers/<cooler>")
def cooler(cooler: str) -> Answer:
    """Show one cooler: its bottles, its seals, who holds it, and what may be done with it."""
    return _cooler(cooler)


def _unread(*, fault: RuleBroken, route: str) -> Answer:
    """Answer the picture of a code in which none was read."""
    sent = {k: v for k, v in request.form.items() if k not in ("act", "token")}
    _zone(route)
    return _counted(route, says=spoken.broken(fault), sent=sent), UNPROCESSABLE


@bp.post("/routes/<route>/pack")
@photographed("code", _unread)
def pack(route: str) -> Answer:
    """Put one scanned bottle, or all in the crate, into a cooler."""
    form = load(forms.PackForm)
    codes = () if form["all"] else (form["code"],)
    already = form["already"] == "yes"
    return _press(
        lambda p, r, when: crate.pack(
            p, r, route, box=form["box"], codes=codes, already=already, when=when
        ),
        form,
        route,
    )


@bp.post("/routes/<route>/locate")
def locate(route: str) -> Answer:
    """Say where a bottle is that is in no cooler."""
    form = load(forms.LocateForm)
    return _press(lambda p, r, _when: crate.locate(p, r, route, **form), {}, route)


@bp.post("/routes/<route>/take-back")
def take_back(route: str) -> Answer:
    """Take the last press on the crate back."""
    form = load(forms.TakeBackForm)
    by = person()
    return _press(lambda p, r, _when: crate.take_back(p, r, route, of=form["of"], by=by), {}, route)


@bp.post("/visits/<visit>/crate")
def count_door(visit: str) -> Answer:
    """Count a visit's bottles into the crate."""
    form = load(forms.DoorForm)
    row = pages().visit(visit)
    if row is None:
        raise Unknown(what="visit", name=visit)
    answer = perform(
        lambda p, r: crate.count_door(p, r, visit, count=form["count"]),
        then=url_for("kitchen.route", route=row["route"]),
    )
    if says := short_count(visit, form["count"]):
        flash(says)
    return answer


@bp.post("/coolers/<cooler>/seal")
def seal(cooler: str) -> Answer:
    """Close a cooler with its seals."""
    form = load(forms.SealForm)
    seals = forms.seals_of(request.form)
    already = form["already"] == "yes"
    return _press(
        lambda p, r, when: custody.seal(
            p, r, cooler, seals=seals, count=form["count"], already=already, when=when
        ),
        form,
        _route_of(cooler),
    )


@bp.post("/coolers/<cooler>/reopen")
def reopen(cooler: str) -> Answer:
    """Break the seals, say why, and close it again where new ones are at hand."""
    form = load(forms.ReopenForm)
    seals = forms.seals_of(request.form)
    return _press(
        lambda p, r, when: custody.reopen(
            p, r, cooler, reason=form["reason"], seals=seals, when=when
        ),
        form,
        _route_of(cooler),
        cooler,
    )


@bp.post("/coolers/<cooler>/relinquish")
def relinquish(cooler: str) -> Answer:
    """Hand a cooler over."""
    form = load(forms.RelinquishForm)
    already = form["already"] == "yes"
    return _press(
        lambda p, r, when: custody.relinquish(
            p, r, cooler, to=form["to"], waybill=form["waybill"], name=form["name"],
            already=already, when=when,
        ),
        form,
        _route_of(cooler),
    )  # fmt: skip


def _press(decide: Timed, form: Mapping[str, Any], route: str, cooler: str = "") -> Answer:
    """Record, then show what is due of the day's count; a broken rule is said above the form."""
    zone = _zone(route)
    then = url_for(".count", route=route)
    try:
        return perform(
            lambda p, r: decide(p, r, when_of(form, zone) if form else When()), then=then
        )
    except LEFT_TO_ERRORS:
        raise
    except RuleBroken as fault:
        give_back()
        g.pop("reading", None)
        again = _bar(fault)
        shown = _cooler(cooler, **again) if cooler else _counted(route, **again)
        return shown, UNPROCESSABLE


def _bar(fault: RuleBroken) -> dict[str, Any]:
    """Return what stands against a press, and the form by which it is recorded all the same."""
    codes = fault.values.get("codes")
    values = {"codes": ", ".join(map(said.grouped, codes))} if codes else {}
    says = spoken.broken(type(fault)(**{**fault.values, **values}))
    sent = {k: v for k, v in request.form.items() if k not in ("act", "token", "already")}
    done = spoken.of(ALREADY, fault.kind) if fault.kind in ALREADY else ""
    return {"says": says, "sent": sent, "done": done, "done_at": request.path}


def _counted(route: str, **more: Any) -> str:
    row = pages().route(route)
    if row is None:
        raise Unknown(what="route", name=route)
    zone = _zone(route)
    loose = crates.loose(pages(), route)
    coolers = crates.coolers(pages(), route=route)
    taking = [one for one in coolers if one["state"] in crate.OPEN and one["bottles"]]
    due, held = _due(loose, taking, [one for one in coolers if one["state"] == "sealed"])
    given = {
        "route": row, "zone": zone, "loose": loose, "coolers": coolers, "due": due, "held": held,
        "box": taking[-1]["box"] if taking else "",
        "counts": crates.day_counts(pages(), route),
        "undo": _undo(route, zone), "spoken": spoken, "said": said, "words": custody_words,
        "whereabouts": crate.WHEREABOUTS, "to": custody.TO, "seals": forms.SEALS,
        "at_hand": [one for one in loose if one["located"] in ("", "with-me")],
        "says": "", "sent": {}, "done": "", "done_at": "",
    }  # fmt: skip
    return render_template("kitchen/count.html", **{**given, **more})


def _due(
    loose: Sequence[Row], taking: Sequence[Row], sealed: Sequence[Row]
) -> tuple[str, Row | None]:
    """Return the act that is due, ``pack``, ``seal``, ``hand-over`` or ``over``, and its cooler."""
    if any(not one["located"] for one in loose):
        return "pack", None
    if taking:
        return "seal", taking[0]
    if any(one["located"] == "with-me" for one in loose):
        return "pack", None
    return ("hand-over", sealed[0]) if sealed else ("over", None)


def _cooler(cooler: str, **more: Any) -> str:
    row = crates.cooler(pages(), cooler)
    if row is None:
        raise Unknown(what="cooler", name=cooler)
    zone = _zone(row["route"])
    given = {
        "cooler": row, "zone": zone, "spoken": spoken, "said": said, "words": custody_words,
        "bottles": [b for code in row["bottles"] if (b := pages().bottle(code))],
        "to": custody.TO, "seals": forms.SEALS, "undo": _undo(row["route"], zone),
        "whereabouts": crate.WHEREABOUTS,
        "says": "", "sent": {}, "done": "", "done_at": "",
    }  # fmt: skip
    return render_template("kitchen/cooler.html", **{**given, **more})


def _undo(route: str, zone: str) -> dict[str, str]:
    """Return the last press on the crate by this person, for the bar that takes it back."""
    entry = crates.latest_press(pages(), route)
    if entry is None or entry.by != person() or not person():
        return {}
    return {"of": entry.hash, "says": spoken.press(entry, zone)}


def _route_of(cooler: str) -> str:
    row = crates.cooler(pages(), cooler)
    if row is None:
        raise Unknown(what="cooler", name=cooler)
    return str(row["route"])


def _zone(route: str) -> str:
    row = pages().route(route)
    g.zone = str(row["zone"]) if row and row["zone"] else "UTC"
    return str(g.zone)
