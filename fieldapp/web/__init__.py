"""Flask: views load a form, call one command inside ``store.act``, redirect."""

import hmac
import secrets
from collections.abc import Mapping
from pathlib import Path
from urllib.parse import urlsplit

from flask import Flask, abort, g, request, session, url_for
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.places import shipped
from fieldapp.store import Store
from fieldapp.web import (
    bench,
    coolers,
    crate,
    desk,
    entry_words,
    errors,
    kitchen,
    links,
    people,
    photos,
    replication,
    scan,
    shown,
    state,
    story,
    work,
)
from fieldapp.web.context import give_back, new_act, pages, person, reading

POLICY = (
    "default-src 'self'; img-src 'self' blob:; object-src 'none'; base-uri 'none';"
    " form-action 'self'; frame-ancestors 'none'"
)
MOST_BYTES = 16 * 1024 * 1024
HOSTS = ["127.0.0.1", "localhost", "[::1]"]
MACHINES = ("/sync/", "/blob/", "/work/")
"""Paths that programs call: signed or with the folder's token, never with a form."""


def create_app(store: Store, *, token: str = "") -> Flask:
    """Return the application of one node.

    Args:
        store: The open node.
        token: What a command on this machine shows to hand its work in (``running.json``).
    """
    static = shipped("static")
    app = Flask(__name__, static_folder=None)
    app.secret_key = store.identity.secret
    app.config.update(
        MAX_CONTENT_LENGTH=MOST_BYTES,
        MAX_FORM_MEMORY_SIZE=MOST_BYTES,
        SESSION_COOKIE_NAME=store.identity.cookie,
        SESSION_COOKIE_HTTPONLY=True,
        SESSION_COOKIE_SAMESITE="Strict",
        TRUSTED_HOSTS=HOSTS,
    )
    app.extensions["tapwitness.store"] = store
    app.extensions["tapwitness.token"] = token
    _serve_static(app, static)
    for part in (
        people,
        kitchen,
        crate,
        photos,
        scan,
        bench,
        desk,
        coolers,
        story,
        replication,
        work,
        state,
    ):
        app.register_blueprint(part.bp)
    app.before_request(_guard)
    app.after_request(_headers)
    app.teardown_request(give_back)
    errors.register(app)
    _speak(app)
    return app


def _serve_static(app: Flask, folder: Path) -> None:
    """Serve the files under a path that changes with them, so that a browser may keep them."""
    version = _version(folder)
    app.extensions["tapwitness.static"] = version

    @app.get(f"/static/{version}/<path:name>", endpoint="static_file")
    def static_file(name: str) -> Response:
        from flask import send_from_directory

        answer = send_from_directory(folder, name, max_age=31_536_000)
        answer.headers["Cache-Control"] = "public, max-age=31536000, immutable"
        return answer


def _version(folder: Path) -> str:
    import hashlib

    digest = hashlib.sha256()
    for path in sorted(p for p in folder.rglob("*") if p.is_file()):
        digest.update(path.name.encode() + path.read_bytes())
    return digest.hexdigest()[:12]


def _speak(app: Flask) -> None:
    """Give the templates their words, filters and the line of what is saved."""
    app.jinja_env.add_extension("jinja2.ext.i18n")
    app.jinja_env.install_gettext_callables(  # type: ignore[attr-defined]
        words.gettext, words.ngettext, newstyle=True
    )
    for name in ("clock", "hours", "face", "code", "ml", "day", "full_day"):
        app.jinja_env.filters[name] = getattr(shown, name)
    app.jinja_env.filters["word"] = words.word
    app.jinja_env.filters["entry"] = entry_words.says
    app.jinja_env.filters["linked"] = links.linked
    app.jinja_env.globals.update(new_act=new_act, form_token=form_token, static_url=static_url)
    app.context_processor(_common)


def _common() -> Mapping[str, object]:
    node = app_store()
    chosen = pages().person(person()) if person() else None
    return {
        "places": people.places(),
        "person_name": (chosen["name"] or chosen["person"]) if chosen else "",
        "state_line": state.line(),
        "rehearsal": node.identity.scripted,
        "now": reading().at,
        "lang": "en",
    }


def app_store() -> Store:
    """Return the store of the application at hand."""
    from fieldapp.web.context import store

    return store()


def static_url(name: str) -> str:
    """Return where a static file is served."""
    return url_for("static_file", name=name)


def form_token() -> str:
    """Return this browser's form token, made at its first page."""
    if "token" not in session:
        session["token"] = secrets.token_urlsafe(24)
    return str(session["token"])


def _guard() -> None:
    """Refuse what another site's page could send: foreign origin, no token (sync.md B13)."""
    g.zone = "UTC"
    if request.method in ("GET", "HEAD", "OPTIONS") or request.path.startswith(MACHINES):
        return
    origin = request.headers.get("Origin")
    if origin and urlsplit(origin).netloc != request.host:
        abort(403)
    if request.headers.get("Sec-Fetch-Site", "same-origin") not in ("same-origin", "none"):
        abort(403)
    sent, kept = request.form.get("token", ""), str(session.get("token", ""))
    if not kept or not hmac.compare_digest(sent, kept):
        abort(400)


def _headers(answer: Response) -> Response:
    answer.headers.setdefault("Content-Security-Policy", POLICY)
    answer.headers["X-Content-Type-Options"] = "nosniff"
    answer.headers["Referrer-Policy"] = "same-origin"
    answer.headers.setdefault("Cache-Control", "no-store")
    return answer
