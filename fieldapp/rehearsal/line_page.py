"""The demo's own page: the line between tablet and central, cut and restored, and the time.

It stands at a port of its own, so it is there when both nodes are gone.
"""

import hmac
import secrets
import threading
from collections.abc import Callable
from socketserver import ThreadingMixIn
from typing import Any
from urllib.parse import urlsplit
from wsgiref.simple_server import WSGIRequestHandler, WSGIServer, make_server

from flask import Flask, abort, redirect, render_template, request, send_file, send_from_directory
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.domain.timetext import zone_named
from fieldapp.places import shipped
from fieldapp.rehearsal import seen
from fieldapp.rehearsal.stage import Stage
from fieldapp.web import HOSTS, POLICY, shown
from fieldapp.work.labels import draw_words

SAID = {
    "cut": words.N_("The line is cut. What is pressed on the tablet waits there."),
    "soon": words.N_("The line breaks in the middle of the next exchange. Send from the tablet."),
    "restored": words.N_("The line is up again. Nothing is sent by itself: press send there."),
    "later": words.N_("Half an hour has passed in the town."),
    "ring": words.N_("Time has passed until the first wait is over. The tablet rings."),
    "no-ring": words.N_("No wait runs on the tablet, so there is nothing to go to."),
}


def create_line_page(stage: Stage) -> Flask:
    """Return the application of the page."""
    app = Flask(__name__, static_folder=None)
    app.config["TRUSTED_HOSTS"] = HOSTS
    app.jinja_env.add_extension("jinja2.ext.i18n")
    app.jinja_env.install_gettext_callables(  # type: ignore[attr-defined]
        words.gettext, words.ngettext, newstyle=True
    )
    app.jinja_env.filters["code"] = shown.code
    app.jinja_env.globals["draw_words"] = draw_words
    token = secrets.token_urlsafe(24)
    app.before_request(lambda: _guard(token))
    app.after_request(_headers)
    app.add_url_rule("/", "line", lambda: _show(stage, token))
    app.add_url_rule("/labels.pdf", "labels", lambda: _labels(stage))
    app.add_url_rule("/static/<path:name>", "static_file", _static)
    for name, deed in _deeds(stage).items():
        app.add_url_rule(f"/{name}", name, _pressed(deed), methods=["POST"])
    return app


def _deeds(stage: Stage) -> dict[str, Callable[[], str]]:
    """Return what each button does; the answer names what is said of it."""

    def done(deed: Callable[[], Any], says: str) -> Callable[[], str]:
        def do() -> str:
            deed()
            return says

        return do

    return {
        "cut": done(stage.relay.cut, "cut"),
        "cut-soon": done(stage.cut_in_the_middle, "soon"),
        "restore": done(stage.relay.restore, "restored"),
        "later": done(stage.later, "later"),
        "ring": lambda: "ring" if stage.to_the_ring() else "no-ring",
    }


def _pressed(deed: Callable[[], str]) -> Callable[[], Response]:
    return lambda: redirect(f"/?said={deed()}", code=303)


def _show(stage: Stage, token: str) -> str:
    now, zone = stage.time.now(), stage.time.zone
    ring = seen.next_ring(stage.tablet)
    return render_template(
        "line.html",
        stage=stage,
        token=token,
        line=stage.relay.told(),
        clock=shown.clock(now, zone, now),
        day=shown.full_day(now.astimezone(zone_named(zone)).date()),
        ring=shown.clock(ring, zone, now) if ring else "",
        tablet=seen.tablet_sees(stage.tablet),
        central=seen.central_sees(stage.central, stage.tablet),
        bottles=seen.bottles(stage.central),
        labels=stage.labels.exists(),
        said=_said(request.args.get("said", "")),
    )


def _said(name: str) -> str:
    return words.gettext(SAID[name]) if name in SAID else ""


def _labels(stage: Stage) -> Response:
    if not stage.labels.exists():
        abort(404)
    return send_file(stage.labels.resolve(), mimetype="application/pdf")


def _static(name: str) -> Response:
    return send_from_directory(shipped("static"), name)


def _guard(token: str) -> None:
    """Refuse what another site's page could press."""
    if request.method != "POST":
        return
    origin = request.headers.get("Origin")
    if origin and urlsplit(origin).netloc != request.host:
        abort(403)
    if not hmac.compare_digest(request.form.get("token", ""), token):
        abort(400)


def _headers(answer: Response) -> Response:
    answer.headers["Content-Security-Policy"] = POLICY
    answer.headers["X-Content-Type-Options"] = "nosniff"
    answer.headers["Referrer-Policy"] = "same-origin"
    answer.headers["Cache-Control"] = "no-store"
    return answer


class _Server(ThreadingMixIn, WSGIServer):
    daemon_threads = True


class _Quiet(WSGIRequestHandler):
    def log_message(self, format: str, *args: Any) -> None:
        """Keep standard error for the demo's own words."""


class LinePage:
    """The page being served on a port of this machine."""

    def __init__(self, stage: Stage) -> None:
        app = create_line_page(stage)
        self._server = make_server("127.0.0.1", 0, app, _Server, _Quiet)
        self.url = f"http://127.0.0.1:{self._server.server_port}"
        self._thread = threading.Thread(target=self._server.serve_forever, daemon=True)
        self._thread.start()

    def __enter__(self) -> "LinePage":
        return self

    def __exit__(self, *_: object) -> None:
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()
