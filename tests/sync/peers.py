"""Ways to reach a central in tests: in the process, over HTTP, and over a line full of faults."""

import io
import random
import ssl
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

from sync.blobs import NONCE
from sync.endpoint import Endpoint
from sync.entry import Realm
from sync.errors import NoContact
from sync.http import HttpPeer
from sync.peer import (
    Answer,
    Carried,
    LoopbackPeer,
    carried,
    decode,
    encode,
    piece_headers,
    unpack,
)

FAULTS = ("drop before", "drop after", "twice", "stale", "truncate", "portal")


class FaultyPeer:
    """A line that loses requests, loses answers, repeats, replays old answers and cuts short.

    ``faults`` yields what happens to each call, or None; when it ends the line is good.
    """

    def __init__(
        self, endpoint: Callable[[], Endpoint], realm: Realm, faults: Iterator[str | None]
    ) -> None:
        self.endpoint, self.realm, self.faults = endpoint, realm, faults
        self.old: list[tuple[int, dict[str, str], bytes]] = []
        self.happened: list[str] = []
        self.lock = threading.Lock()

    def send(self, path: str, body: Mapping[str, Any], *, token: str = "") -> Answer:
        """Carry one request, or do to it what is due."""
        fault = next(self.faults, None)
        if fault is not None:
            self.happened.append(fault)
        if fault == "drop before":
            raise NoContact("the request was lost")
        code, headers, raw = self._carry(path, body, token)
        if fault == "drop after":
            raise NoContact("the answer was lost")
        if fault == "twice":
            code, headers, raw = self._carry(path, body, token)
        if fault == "truncate":
            raw = raw[: len(raw) // 2]
        if fault == "portal":
            headers, raw = {"content-type": "text/html"}, b"<h1>Welcome</h1>"
        if fault == "stale" and self.old:
            code, headers, raw = self.old[0]
        self.old.append((code, headers, raw))
        return decode(self.realm, code, headers, raw)

    def carry(
        self, method: str, path: str, headers: Mapping[str, str], data: bytes, *, token: str = ""
    ) -> Carried:
        """Carry one piece of a blob, or do to it what is due."""
        with self.lock:
            fault = next(self.faults, None)
            if fault is not None:
                self.happened.append(fault)
        if fault == "drop before":
            raise NoContact("the piece was lost")
        line = LoopbackPeer(self.endpoint(), self.realm)
        kept = data[: len(data) // 2] if fault == "truncate" else data
        sent = piece_headers(headers, data, token)
        code, answered, raw = line.endpoint.blob(method, path, sent, io.BytesIO(kept))
        if fault == "twice":
            code, answered, raw = line.endpoint.blob(method, path, sent, io.BytesIO(kept))
        if fault in ("drop after", "truncate"):
            raise NoContact("the answer was lost")
        nonce = "of another request" if fault in ("stale", "portal") else sent[NONCE]
        named = {name.lower(): value for name, value in answered}
        return carried(code, named, raw, nonce)

    def _carry(
        self, path: str, body: Mapping[str, Any], token: str
    ) -> tuple[int, dict[str, str], bytes]:
        headers, packed = encode(self.realm, body, token)
        code, answered, raw = self.endpoint().answer("POST", path, headers, packed, "line")
        named = {name.lower(): value for name, value in answered}
        if named.get("content-encoding") == "gzip":
            raw = unpack(raw, 1 << 24)
        return code, named, raw


def seeded(seed: int, share: float) -> Iterator[str | None]:
    """Yield faults by chance, the same ones for the same seed, for ever."""
    chance = random.Random(seed)
    while True:
        yield chance.choice(FAULTS) if chance.random() < share else None


@contextmanager
def served(
    answer: Callable[..., tuple[int, list[tuple[str, str]], bytes]],
    tls: ssl.SSLContext | None = None,
) -> Iterator[str]:
    """Serve one function on a free port of this machine and yield its address."""

    class Door(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def do_POST(self) -> None:
            body = self.rfile.read(int(self.headers.get("Content-Length", "0")))
            code, headers, raw = answer(
                "POST", self.path, dict(self.headers), body, self.client_address[0]
            )
            self.send_response(code)
            for name, value in headers:
                self.send_header(name, value)
            self.send_header("Content-Length", str(len(raw)))
            self.end_headers()
            self.wfile.write(raw)

        def log_message(self, format: str, *args: object) -> None:
            """Say nothing."""

    class Server(ThreadingHTTPServer):
        def handle_error(self, request: object, client_address: object) -> None:
            """Say nothing of a caller who hung up."""

    server = Server(("127.0.0.1", 0), Door)
    if tls is not None:
        server.socket = tls.wrap_socket(server.socket, server_side=True)
    thread = threading.Thread(target=server.serve_forever, args=(0.01,))
    thread.start()
    try:
        yield f"{'https' if tls else 'http'}://127.0.0.1:{server.server_port}"
    finally:
        server.shutdown()
        thread.join()
        server.server_close()


@contextmanager
def over_http(endpoint: Callable[[], Endpoint], realm: Realm) -> Iterator[HttpPeer]:
    """Yield central over real HTTP on this machine."""
    with served(lambda *asked: endpoint().answer(*asked)) as url:
        peer = HttpPeer(url, realm)
        try:
            yield peer
        finally:
            peer.close()


@contextmanager
def over_loopback(endpoint: Callable[[], Endpoint], realm: Realm) -> Iterator[LoopbackPeer]:
    """Yield central in this process."""

    class Present:
        def answer(self, *asked: Any) -> tuple[int, list[tuple[str, str]], bytes]:
            return endpoint().answer(*asked)

    yield LoopbackPeer(Present(), realm)
