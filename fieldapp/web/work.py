"""``/work``: what a command on this machine hands to the running node, with its progress.

The answer is a stream of JSON lines: progress, then one ``answer`` or one ``fault``. Only who can
read ``running.json`` (0600) knows the token.
"""

import hmac
import json
import queue
import threading
from collections.abc import Iterator

from flask import Blueprint, Response, abort, current_app, request

from fieldapp import work
from fieldapp.store import Store
from fieldapp.web.context import store
from fieldapp.work.faults import said_of

bp = Blueprint("work", __name__)
LOOPBACK = ("127.0.0.1", "::1")


@bp.post("/work/<name>")
def hand_in(name: str) -> Response:
    """Do a command's work here and tell it as it goes."""
    kept = current_app.extensions["tapwitness.token"]
    sent = request.headers.get("Authorization", "").removeprefix("Bearer ")
    if not kept or not hmac.compare_digest(sent, kept) or request.remote_addr not in LOOPBACK:
        abort(403)
    if name not in work.WORK:
        abort(404)
    asked = request.get_json()
    return Response(_told(store(), name, asked), mimetype="application/x-ndjson")


def _told(node: Store, name: str, asked: dict[str, object]) -> Iterator[str]:
    lines: queue.Queue[dict[str, object] | None] = queue.Queue()

    def run() -> None:
        try:
            progress = lambda what, done, of: lines.put(  # noqa: E731
                {"progress": what, "done": done, "of": of}
            )
            lines.put({"answer": work.do(node, name, asked, progress)})
        except Exception as fault:  # every fault is told to the command that asked
            lines.put({"fault": said_of(fault)})
        lines.put(None)

    threading.Thread(target=run, daemon=True).start()
    while (line := lines.get()) is not None:
        yield json.dumps(line, ensure_ascii=False) + "\n"
