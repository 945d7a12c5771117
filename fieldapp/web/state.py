"""The line at the bottom of every page: what is saved, what waits, what central has (sync B12)."""

import json
from datetime import datetime, timedelta

from flask import Blueprint, redirect, render_template, request, url_for
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.web import shown
from fieldapp.web.context import pages, reading, store

bp = Blueprint("state", __name__)

AMBER_AFTER, RED_AFTER = timedelta(hours=24), timedelta(hours=72)


def line() -> list[dict[str, str]]:
    """Return the words of the state line with their class (quiet, good, amber, red)."""
    said = [{"says": words.gettext("Saved on this device"), "tone": "quiet"}]
    node = store()
    if unread := pages().count("SELECT COUNT(*) FROM p_unread"):
        says = words.gettext("Needs a look ({n})").format(n=unread)
        said.append({"says": says, "tone": "amber"})
    if node.central() is None:
        return said
    waiting, contact = node.waiting(), node.get("contact")
    last = json.loads(contact)["at"] if contact else ""
    if waiting:
        said.append(_waiting(waiting, last))
    elif (known := node.acknowledged_at()) is not None:
        at = shown.clock(known, zone(), reading().at)
        says = words.gettext("Received by central {at}").format(at=at)
        said.append({"says": says, "tone": "good"})
    if photos := node.photos_waiting():
        says = words.gettext("Photo waiting ({n})").format(n=len(photos))
        said.append({"says": says, "tone": "quiet"})
    return said


def _waiting(waiting: int, last: str) -> dict[str, str]:
    says = words.gettext("Waiting to send ({n})").format(n=waiting)
    if not last:
        return {"says": says, "tone": "quiet"}
    since = reading().at - datetime.fromisoformat(last)
    tone = "red" if since > RED_AFTER else "amber" if since > AMBER_AFTER else "quiet"
    at = shown.clock(last, zone(), reading().at)
    return {"says": f"{says} · " + words.gettext("last contact {at}").format(at=at), "tone": tone}


def zone() -> str:
    """Return the zone in which this node's pages show times: that of its latest round."""
    found = pages().rounds()
    return str(found[0]["zone"]) if found else "UTC"


@bp.get("/state")
def waiting() -> str:
    """Show what has not reached central, and offer to send it now."""
    node = store()
    rows = pages().rows(
        "SELECT f.kind, f.at, f.log, f.seq FROM p_fact f JOIN own_log o ON o.log = f.log"
        " LEFT JOIN acknowledgement a ON a.log = f.log"
        " WHERE f.seq > COALESCE(a.seq, 0) ORDER BY f.at DESC LIMIT 200"
    )
    pin, photos = node.central(), node.photos_waiting()
    return render_template(
        "state.html", rows=rows, waiting=node.waiting() if pin else 0, central=pin, zone=zone(),
        photos=photos if pin else {}, dev=node.dev, says=request.args.get("says", ""),
        unread=pages().unread(),
    )  # fmt: skip


@bp.post("/state/send")
def send() -> Response:
    """Send and fetch now."""
    from fieldapp.work import send_and_fetch

    try:
        report = send_and_fetch(store())
        says = words.gettext("Sent {pushed}, fetched {pulled}, photos {photos}.").format(**report)
        says = " ".join(filter(None, [says, report["photos_say"]]))
    except Exception as fault:  # any trouble on the line is said, never a broken page
        says = str(fault)
    return redirect(url_for(".waiting", says=says), code=303)
