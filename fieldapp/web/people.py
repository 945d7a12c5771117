"""The first page: who holds this device, and which place is open on it."""

from flask import Blueprint, flash, redirect, render_template, request, session, url_for
from marshmallow import Schema, fields, validate
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.web.context import load, pages, person, store

bp = Blueprint("people", __name__)


class PersonForm(Schema):
    """Which person of the round this is."""

    person = fields.String(required=True, validate=validate.Length(min=1, max=40))
    then = fields.String(load_default="")


@bp.get("/")
def first() -> str:
    """Show who may hold this device and the places open on it."""
    carries = store().get("person")  # whom this device was enrolled for comes first
    found = sorted(pages().people(), key=lambda one: one["person"] != carries)
    return render_template("people.html", people=found, chosen=person(), then=_safe(request.args))


@bp.post("/person")
def choose() -> Response | tuple[str, int]:
    """Remember the person for this browser; no log-in yet, so ``auth`` is ``none``."""
    form = load(PersonForm)
    if pages().person(form["person"]) is None:
        flash(words.gettext("Nobody of that name is listed. Choose from the list."))
        return redirect(url_for(".first"), code=303)
    session["person"] = form["person"]
    return redirect(_safe(form) or start_page(), code=303)


def start_page() -> str:
    """Return the first page of this node's own place."""
    place = next(iter(places()), "desk")
    return url_for(f"{place}.index")


def places() -> list[str]:
    """Return the places open on this node, in the order of the work."""
    return [p for p in ("kitchen", "bench", "desk") if p in store().get("places").split()]


def _safe(given: dict[str, str]) -> str:
    then = str(given.get("then", ""))
    return then.rstrip("?") if then.startswith("/") and not then.startswith("//") else ""
