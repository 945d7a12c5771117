"""Photos of a visit: one a request, on disk before anything else; and the pictures themselves."""

import hashlib

from flask import Blueprint, Response, abort, flash, g, render_template, request, send_file, url_for
from marshmallow import fields, validate

from fieldapp import photos as shelf
from fieldapp import words
from fieldapp.commands import photos
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.protocols.standing import Standing
from fieldapp.photos import BadPicture, NoRoom
from fieldapp.web import kitchen_forms as forms
from fieldapp.web import kitchen_pages as shown_as
from fieldapp.web import spoken
from fieldapp.web.context import NoPerson, give_back, load, pages, perform, person, store
from fieldapp.web.kitchen_press import Answer

bp = Blueprint("photos", __name__)

UNPROCESSABLE = 422
FOREVER = "private, max-age=31536000, immutable"
"""A file under its own hash never changes; it stays in this browser alone."""


class PhotoForm(forms.WhenForm):
    """What is said of one picture."""

    about = fields.String(load_default="", validate=validate.Length(max=80))
    caption = fields.String(load_default="", validate=forms.NOTE)


@bp.get("/kitchen/visits/<visit>/photos")
def of_visit(visit: str) -> Answer:
    """Show the visit's photos and the form for one more."""
    return _page(visit)


@bp.post("/kitchen/visits/<visit>/photos")
def take(visit: str) -> Answer:
    """Keep one picture, then note it; a tab that is killed costs this one at most."""
    if not person():
        raise NoPerson()
    zone = shown_as.zone_of(visit)
    form = load(PhotoForm)
    data = b"".join(one.read() for one in request.files.getlist("photo")[:1])
    try:
        kept = shelf.keep(data, store().folder)
        answer = perform(
            lambda p, r: photos.take(
                p, r, visit, photo=kept.sha256, n=kept.n, media=kept.media, about=form["about"],
                caption=form["caption"], when=forms.when_of(form, zone),
            ),
            then=url_for(".of_visit", visit=visit),
            fields={**request.form.to_dict(), "act": "", "token": "", "photo": _mark(data)},
        )  # fmt: skip
    except (BadPicture, NoRoom, photos.StrangeSubject) as fault:
        return _refused(visit, fault)
    flash(words.gettext("The photo is saved on this device."))
    return answer


@bp.get("/photos/<sha256>")
def picture(sha256: str) -> Response:
    """Serve a photo or a document that an entry here names."""
    media = store().names_blob(sha256)
    path = shelf.find(sha256, store().folder)
    if not media or path is None:
        abort(404)
    paper = media != shelf.JPEG
    answer = send_file(
        path,
        mimetype=shelf.PDF if paper else shelf.JPEG,
        as_attachment=paper,
        download_name=f"{sha256[:12]}.{'pdf' if paper else 'jpg'}",
        conditional=False,
    )
    if not paper:
        answer.headers["Content-Disposition"] = "inline"
    answer.headers["Cache-Control"] = FOREVER
    return answer


@bp.get("/photos/<sha256>/small")
def small(sha256: str) -> Response:
    """Serve a photo at the size of a list."""
    made = shelf.small(sha256, store().folder) if store().names_blob(sha256) else None
    if made is None:
        abort(404)
    headers = {"Content-Disposition": "inline", "Cache-Control": FOREVER}
    return Response(made, mimetype=shelf.JPEG, headers=headers)


def _refused(visit: str, fault: RuleBroken) -> Answer:
    give_back()
    g.pop("reading", None)
    return _page(visit, says=spoken.broken(fault), sent=request.form.to_dict()), UNPROCESSABLE


def _page(visit: str, *, says: str = "", sent: dict[str, str] | None = None) -> str:
    found = shown_as.gather(visit)
    waiting = store().photos_waiting() if store().central() else {}
    about = (sent or {}).get("about") or request.args.get("about", "")
    return render_template(
        "kitchen/photos.html",
        says=says,
        sent={**(sent or {}), "about": about},
        subjects=[
            (subject, _subject_says(sort, subject, found["told"]))
            for sort, subject in photos.subjects(pages(), visit)
        ],
        waiting=waiting,
        central=store().central(),
        spoken=spoken,
        **found,
    )


def _subject_says(sort: str, subject: str, told: Standing) -> str:
    """Return the words of a chip: the visit, a bottle by its draw, a deviation by its kind."""
    name = subject.partition(":")[2]
    if sort == photos.VISIT:
        return words.gettext("the visit")
    if sort == photos.BOTTLE:
        draws = [one.draw for one in told.draws if one.bottle == name]
        row = pages().bottle(name) or {}
        number = draws[0] if draws else row.get("draw") or ""
        return words.gettext("bottle {n}, {code}").format(n=number, code=name[-4:])
    entry = pages().fact(name)
    return spoken.of(spoken.DEVIATIONS, getattr(entry.fact, "deviation", "")) if entry else name[:8]


def _mark(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()
