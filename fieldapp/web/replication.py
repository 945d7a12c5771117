"""``/sync`` and ``/blob``: the door for other nodes. Bytes in, bytes out; ``sync`` has the rest."""

from flask import Blueprint, Flask, Response, current_app, request
from werkzeug.exceptions import ClientDisconnected

from fieldapp.store import Store
from fieldapp.work.devices import take_invite
from sync.blobs import Readable
from sync.endpoint import Endpoint
from sync.wire import MOST_WIRE_BYTES

bp = Blueprint("replication", __name__)
ENDPOINT = "tapwitness.endpoint"


def open_door(app: Flask, store: Store) -> None:
    """Let devices in at this node: it becomes a central's door."""
    store.enrolling = lambda dev, key, code: take_invite(store, dev, key, code)
    app.extensions[ENDPOINT] = Endpoint(store.replica())


def create_door(store: Store) -> Flask:
    """Return an application with the door and nothing else: no page leaves this machine."""
    app = Flask("tapwitness-door", static_folder=None)
    app.config["MAX_CONTENT_LENGTH"] = MOST_WIRE_BYTES
    app.register_blueprint(bp)
    open_door(app, store)
    return app


@bp.route("/sync/v1/<path:_what>", methods=["GET", "POST"])
def door(_what: str) -> Response:
    """Answer a device."""
    endpoint = current_app.extensions.get(ENDPOINT)
    if endpoint is None:
        return Response("This node is no central.", status=404)
    code, headers, body = endpoint.answer(
        request.method,
        request.path,
        dict(request.headers),
        request.get_data(cache=False),
        request.remote_addr or "",
    )
    return Response(body, status=code, headers=headers)


@bp.route("/blob/v1/<path:_name>", methods=["HEAD", "PATCH"])
def blob(_name: str) -> Response:
    """Take a piece of a photo from a device, or say where it ends."""
    endpoint = current_app.extensions.get(ENDPOINT)
    if endpoint is None:
        return Response("This node is no central.", status=404)
    code, headers, body = endpoint.blob(
        request.method, request.path, dict(request.headers), _Body(request.stream)
    )
    return Response(body, status=code, headers=headers)


class _Body:
    """A request's body as it arrives; a line that breaks in the middle is the end of it."""

    def __init__(self, stream: Readable) -> None:
        self._stream = stream

    def read(self, size: int, /) -> bytes:
        """Return what has come, at most so many bytes."""
        try:
            return self._stream.read(size)
        except (ClientDisconnected, OSError):
            return b""
