"""A photographed code: read on the node, then it stands in the form as if it had been typed."""

from collections.abc import Callable
from functools import wraps
from typing import Any

from flask import Blueprint, Response, jsonify, request
from werkzeug.datastructures import ImmutableMultiDict, MultiDict

from fieldapp import scanning, words
from fieldapp.domain.errors import RuleBroken
from fieldapp.scanning import NoCodeSeen

bp = Blueprint("scan", __name__)

UNPROCESSABLE = 422
PICTURE = "picture"
"""The field under which a form sends the picture of a code."""


@bp.post("/scan")
def read() -> Response | tuple[Response, int]:
    """Answer the code in a picture as ``code``, or ``says`` and ``kind`` where none is read.

    ``want`` is ``bottle``, or ``any`` for a counter that scans cards and stickers too.
    """
    try:
        return jsonify(code=_seen(request.form.get("want", "bottle")))
    except RuleBroken as fault:
        says = words.broken(fault.kind, fault.values)
        return jsonify(says=says, kind=fault.kind), UNPROCESSABLE


def photographed(field: str, refuse: Callable[..., Any], *, want: str = "bottle") -> Any:
    """Let a form bring the picture of a code in place of the typed one.

    Args:
        field: The form's field for the code; what is typed there counts before a picture.
        refuse: Answers the rule that a picture broke, with the view's own arguments.
        want: ``bottle`` or ``any``.
    """

    def around(view: Callable[..., Any]) -> Callable[..., Any]:
        @wraps(view)
        def seen(**given: str) -> Any:
            brought = request.files.get(PICTURE)
            if brought and not request.form.get(field, "").strip():
                try:
                    code = _seen(want)
                except RuleBroken as fault:
                    return refuse(fault=fault, **given)
                # the view and the act's memory see a typed code
                typed = MultiDict(request.form)
                typed[field] = code
                request.form = ImmutableMultiDict(typed)
            return view(**given)

        return seen

    return around


def _seen(want: str) -> str:
    brought = request.files.get(PICTURE)
    data = brought.read() if brought else b""
    if want != "any":
        return scanning.bottle_in(data)
    texts = scanning.texts_in(data)
    if len(texts) != 1:
        raise NoCodeSeen(**({"why": "several", "count": len(texts)} if texts else {}))
    return texts[0]
