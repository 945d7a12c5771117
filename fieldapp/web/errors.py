"""Errors to pages, in one place: one sentence that says what to do next, and a way on."""

import sqlite3
from http import HTTPStatus

from flask import Flask, flash, g, jsonify, redirect, render_template, request, url_for
from werkzeug.exceptions import HTTPException, SecurityError
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.store import ActDiffers, RecordStopped
from fieldapp.web import shown
from fieldapp.web.context import BadForm, NoPerson, give_back, reading

UNPROCESSABLE = 422
INSTANTS = ("at", "until", "since", "first", "second")


def register(app: Flask) -> None:
    """Answer every error of this application in words."""
    app.register_error_handler(RuleBroken, rule_broken)
    app.register_error_handler(BadForm, bad_form)
    app.register_error_handler(HTTPException, http_fault)
    app.register_error_handler(sqlite3.OperationalError, disk_fault)
    app.register_error_handler(RecordStopped, disk_fault)


def sentence(fault: RuleBroken) -> str:
    """Return the sentence of a broken rule, its instants in the reader's zone."""
    zone = str(g.get("zone", "UTC"))
    values = {
        name: shown.clock(value, zone, reading().at) if _is_instant(name, value) else value
        for name, value in fault.values.items()
    }
    return words.broken(fault.kind, values)


def rule_broken(fault: RuleBroken) -> Response | tuple[str, int]:
    """Answer a broken rule: nothing was recorded."""
    says = sentence(fault)
    if wants_json():
        return _json(says, _code_of(fault), fault.kind)
    if isinstance(fault, NoPerson):
        return redirect(url_for("people.first", then=request.full_path), code=303)
    if isinstance(fault, StepOver) and g.get("then"):
        flash(says)
        return redirect(g.then, code=303)
    title = words.gettext("Already recorded") if isinstance(fault, ActDiffers) else ""
    return page(says, _code_of(fault), title=title)


def bad_form(fault: BadForm) -> Response | tuple[str, int]:
    """Answer form fields that cannot be taken."""
    says = [
        one if name in ("act", "_schema") else f"{name.replace('_', ' ')}: {one}"
        for name, found in fault.faults.items()
        for one in (found if isinstance(found, list) else [str(found)])
    ]
    if wants_json():
        return _json(" ".join(says), UNPROCESSABLE, "bad-form")
    return page(" ".join(says), UNPROCESSABLE)


def http_fault(fault: HTTPException) -> Response | tuple[str, int]:
    """Answer what HTTP itself refuses."""
    code = fault.code or 500
    known = {
        404: words.gettext("There is no such page. Go back to the start."),
        405: words.gettext("That page is only read, not sent to. Go back and press the button."),
        413: words.gettext("That is too large to take. Send a smaller file."),
        400: words.gettext("This page is too old or came from elsewhere. Open it again."),
        403: words.gettext("This page answers only to this machine."),
    }
    says = known.get(code, words.gettext("That did not work. Go back and try once more."))
    if isinstance(
        request.routing_exception, SecurityError
    ):  # under another name no address of ours can be built
        return Response(known[403], status=code, mimetype="text/plain")
    if wants_json():
        return _json(says, code, "http")
    return page(says, code)


def disk_fault(fault: Exception) -> Response | tuple[str, int]:
    """Answer a disk that is full or failing: what was pressed is not saved."""
    full = "full" in str(fault)
    says = (
        words.gettext("The disk is full: that press was not saved. Free some space, then press.")
        if full
        else words.gettext("The disk failed: that press was not saved. Restart the program.")
    )
    if wants_json():
        return _json(says, HTTPStatus.INSUFFICIENT_STORAGE, "disk")
    return page(says, HTTPStatus.INSUFFICIENT_STORAGE)


def page(says: str, status: int, *, title: str = "") -> tuple[str, int]:
    """Return the error page."""
    give_back()
    back = g.get("then") or request.referrer or url_for("people.first")
    return render_template("error.html", says=says, back=back, heading=title, status=status), status


def wants_json() -> bool:
    """Say whether a script asked."""
    return request.accept_mimetypes.best == "application/json"


def _json(says: str, status: int, kind: str) -> Response:
    answer = jsonify({"says": says, "kind": kind})
    answer.status_code = int(status)
    return answer


def _code_of(fault: RuleBroken) -> int:
    if isinstance(fault, ActDiffers):
        return HTTPStatus.CONFLICT
    return HTTPStatus.NOT_FOUND if isinstance(fault, Unknown) else UNPROCESSABLE


def _is_instant(name: str, value: object) -> bool:
    return bool(value) and (name in INSTANTS or name.endswith("_at"))
