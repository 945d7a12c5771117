"""A running node: its web servers, ``running.json``, and handing work to it from a command."""

import contextlib
import json
import os
import secrets
import socket
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fieldapp import identity
from fieldapp.store import Store
from sync.blobs import SILENCE_S
from sync.errors import FolderHeld, SyncError, Unsuitable

RUNNING = "running.json"
STARTING_S = 5.0
"""A node that starts holds its folder this long at most before it answers; our choice."""
LOOK_AGAIN_S = 0.05
THREADS = 4
"""Four threads and one write lock: about a thousand durable posts a second (design 8)."""


class HandedBack(SyncError):
    """The running node did the work and answers no, or fails; ``lines`` says why."""

    def __init__(self, lines: list[str], *, known: bool) -> None:
        self.lines, self.known = lines, known
        super().__init__(" ".join(lines))


@dataclass(frozen=True)
class Running:
    """Where a node answers on this machine."""

    port: int
    token: str

    @property
    def url(self) -> str:
        """Return its address."""
        return f"http://127.0.0.1:{self.port}"


def read_running(folder: Path) -> Running | None:
    """Return where the folder's node says it runs; nothing where it does not say."""
    with contextlib.suppress(OSError, ValueError, KeyError, TypeError):
        found = json.loads((folder / RUNNING).read_text("utf-8"))
        return Running(int(found["port"]), str(found["token"]))
    return None


def serve(
    store: Store,
    *,
    port: int = 0,
    door: bool = False,
    listen: str = "",
    certificate: str = "",
    key: str = "",
    ready: Callable[[Running], None],
) -> None:
    """Serve the node's pages on 127.0.0.1 until a signal ends it.

    Args:
        store: The open node.
        port: The port; 0 takes the one used last, else a free one.
        door: Open ``/sync`` and ``/blob`` here: the node is a central.
        listen: ``ADDRESS:PORT`` that opens ``/sync`` and ``/blob`` to others, never a page.
        certificate: PEM file for ``listen``; needed for any address but loopback.
        key: PEM file of its private key.
        ready: Told once it answers.
    """
    from waitress.server import create_server

    from fieldapp.web import create_app
    from fieldapp.web.replication import open_door

    token = secrets.token_urlsafe(32)
    app = create_app(store, token=token)
    if door:
        open_door(app, store)
    with contextlib.ExitStack() as opened:
        if listen:
            opened.callback(_open_listen(store, listen, certificate, key))
        bound = _bind(port or int(store.get("port") or 0), asked=bool(port))
        server = create_server(app, sockets=[bound], threads=THREADS, ident="")
        opened.callback(server.close)
        running = Running(bound.getsockname()[1], token)
        with store.transaction():
            store.put("port", str(running.port))
        said = {"port": running.port, "token": token, "pid": os.getpid()}
        identity.write_private(store.folder / RUNNING, said)
        opened.callback((store.folder / RUNNING).unlink, missing_ok=True)
        ready(running)
        server.run()


def _bind(port: int, *, asked: bool) -> socket.socket:
    """Bind loopback, at the port used last where it is free."""
    bound = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
    bound.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        bound.bind(("127.0.0.1", port))
    except OSError as fault:
        if asked:
            bound.close()
            raise Unsuitable(
                f"Port {port} is taken by another program. Name another one, or none."
            ) from fault
        bound.bind(("127.0.0.1", 0))
    bound.listen(64)
    return bound


def _open_listen(store: Store, listen: str, certificate: str, key: str) -> Callable[[], None]:
    """Open the door to others: https, or plain http on loopback alone."""
    from fieldapp.web.replication import create_door

    host, _, port = listen.rpartition(":")
    host = host.strip("[]")
    if not host or not port.isdigit():
        raise Unsuitable(f"{listen!r} is no ADDRESS:PORT. Give one like 0.0.0.0:8443.")
    local = host in ("127.0.0.1", "::1", "localhost")
    if not local and not (certificate and key):
        raise Unsuitable(
            "Devices reach a central by https only. Give --certificate and --key, or listen on "
            "127.0.0.1 behind a server of yours that does https."
        )
    try:
        from cheroot.ssl.builtin import BuiltinSSLAdapter
        from cheroot.wsgi import Server
    except ImportError as fault:
        raise Unsuitable(
            "Listening needs the central extra: install 'tapwitness[central]'."
        ) from fault
    server = Server((host, int(port)), create_door(store), numthreads=THREADS, timeout=SILENCE_S)
    if certificate and key:
        try:
            server.ssl_adapter = BuiltinSSLAdapter(certificate, key)
        except OSError as fault:  # an SSLError is one too
            raise Unsuitable(
                f"{certificate} and {key} are no certificate with its key: "
                f"{fault.strerror or fault}. Give two PEM files that belong together."
            ) from fault
    try:
        server.prepare()
    except OSError as fault:
        raise Unsuitable(
            f"{listen} cannot be listened on: {fault.strerror or fault}. Name another."
        ) from fault
    threading.Thread(target=server.serve, daemon=True).start()
    return server.stop  # type: ignore[no-any-return]


def open_patiently(folder: Path) -> Store | Running:
    """Open the folder's node; of a running one return where it answers.

    A command that does its work, or a node that starts or ends, holds a folder for a moment
    without saying where it answers: that moment is waited for.

    Raises:
        FolderHeld: another program holds the folder and does not say where it answers.
    """
    until = time.monotonic() + STARTING_S
    while True:
        try:
            return Store.open(folder)
        except FolderHeld:
            running = read_running(folder)
            if running is not None:
                return running
            if time.monotonic() > until:
                raise
            time.sleep(LOOK_AGAIN_S)


def open_to_serve(folder: Path) -> Store:
    """Open the folder's node for a process of its own.

    Raises:
        FolderHeld: it runs already, or something else holds the folder.
    """
    found = open_patiently(folder)
    if isinstance(found, Running):
        raise FolderHeld(folder)
    return found


def hand_over(
    folder: Path, name: str, asked: Mapping[str, Any], progress: Callable[[str, int, int], None]
) -> dict[str, Any]:
    """Do work at the folder's node: here when nobody runs it, else at the running one.

    Raises:
        HandedBack: the running node answers no.
        FolderHeld: another program holds the folder and does not say where it answers.
    """
    from fieldapp import work

    found = open_patiently(folder)
    if isinstance(found, Running):
        return _hand_to(found, name, asked, progress)
    with found as store:
        return work.do(store, name, asked, progress)


def _hand_to(
    running: Running,
    name: str,
    asked: Mapping[str, Any],
    progress: Callable[[str, int, int], None],
) -> dict[str, Any]:
    for line in _lines(running, name, asked):
        if "progress" in line:
            progress(str(line["progress"]), int(line["done"]), int(line["of"]))
        elif "answer" in line:
            return dict(line["answer"])
        elif "fault" in line:
            raise HandedBack(list(line["fault"]["lines"]), known=bool(line["fault"]["known"]))
    raise HandedBack(["The running node stopped in the middle. Run the command again."], known=True)


def _lines(running: Running, name: str, asked: Mapping[str, Any]) -> Iterator[dict[str, Any]]:
    from http.client import HTTPException
    from urllib import error, request

    post = request.Request(
        f"{running.url}/work/{name}",
        data=json.dumps(asked).encode(),
        headers={"Authorization": f"Bearer {running.token}", "Content-Type": "application/json"},
    )
    opener = request.build_opener(request.ProxyHandler({}))
    try:
        with opener.open(post) as answer:
            for line in answer:
                if not line.endswith(b"\n"):
                    return  # cut off in the middle of a word
                yield json.loads(line)
    except error.HTTPError as fault:
        raise HandedBack(
            [f"The running node refused the work ({fault.code}). Restart it and try again."],
            known=True,
        ) from fault
    except (OSError, HTTPException) as fault:
        raise HandedBack(
            ["The running node does not answer. Stop it, then run the command again."], known=True
        ) from fault
