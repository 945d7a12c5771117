"""Photos over real HTTP, by both servers that open the door, and a line that is cut by bytes."""

import contextlib
import socket
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from fieldapp import identity, photos
from fieldapp.domain.facts import PhotoTaken
from fieldapp.work import send_and_fetch
from fieldapp.work.devices import take_invite
from sync import exchange
from sync.blobs import MOST_PIECE_BYTES, ROOT
from sync.http import HttpPeer
from sync.upload import Uploaded
from tests import nodes
from tests.nodes import Pair, press
from tests.pictures import noisy

PIECE = MOST_PIECE_BYTES
VISIT = "V-0401"


@contextlib.contextmanager
def by_waitress(pair: Pair) -> Iterator[int]:
    from waitress.server import create_server

    from fieldapp.web import create_app
    from fieldapp.web.replication import open_door

    app = create_app(pair.central)
    open_door(app, pair.central)
    server = create_server(app, host="127.0.0.1", port=0, threads=4)
    thread = threading.Thread(target=server.run)
    thread.start()
    yield server.effective_port
    server.close()
    thread.join(20)


@contextlib.contextmanager
def by_cheroot(pair: Pair) -> Iterator[int]:
    from cheroot.wsgi import Server

    from fieldapp.web.replication import create_door

    server = Server(("127.0.0.1", 0), create_door(pair.central), numthreads=4)
    server.prepare()
    thread = threading.Thread(target=server.serve)
    thread.start()
    yield server.bind_addr[1]
    server.stop()
    thread.join(20)


@pytest.fixture
def pair(tmp_path: Path) -> Iterator[Pair]:
    made = nodes.make_pair(tmp_path)
    yield made
    made.close()


@pytest.fixture(params=[by_waitress, by_cheroot], ids=["waitress", "cheroot"])
def port(request, pair: Pair) -> Iterator[int]:
    with request.param(pair) as port:
        aim(pair, port)
        yield port


def aim(pair: Pair, port: int) -> None:
    """Let the tablet know central by that port."""
    pair.central.enrolling = lambda dev, key, code: take_invite(pair.central, dev, key, code)
    pin = dict(identity.central_of(pair.tablet.folder))
    identity.pin_central(pair.tablet.folder, {**pin, "url": f"http://127.0.0.1:{port}"})


def photograph(pair: Pair, side: int, seed: int = 1) -> str:
    """Take a photo at the tablet and return its hash."""
    kept = photos.keep(noisy(side, seed), pair.tablet.folder)
    press(
        pair.tablet,
        PhotoTaken(
            about=f"visit:{VISIT}", photo=kept.sha256, n=kept.n, media=kept.media, visit=VISIT
        ),
    )
    return kept.sha256


def arrived(pair: Pair, name: str) -> bool:
    return pair.central.shelf.has(name) and pair.central.shelf.sound(name)


def test_photos_of_a_visit_reach_central_after_their_entries(pair, port):
    names = [photograph(pair, side, side) for side in (40, 900, 300)]
    assert len(pair.tablet.photos_waiting()) == 3
    report = send_and_fetch(pair.tablet)
    assert (report["photos"], report["photos_waiting"], report["photos_say"]) == (3, 0, "")
    assert all(arrived(pair, name) for name in names)
    assert pair.tablet.photos_waiting() == {}


def test_the_door_says_where_a_photo_ends_and_takes_a_piece(pair, port):
    name = photograph(pair, 900)
    data = pair.tablet.shelf.path(name).read_bytes()
    with pytest.MonkeyPatch.context() as still:
        still.setattr("sync.exchange.Uploading.run", lambda *_: Uploaded())
        pair.exchange()
    peer = HttpPeer(f"http://127.0.0.1:{port}", pair.tablet.realm)
    exchange.open_session(pair.tablet.replica(), peer)
    token = pair.tablet.replica().token
    try:
        assert peer.carry("HEAD", ROOT + name, {}, b"", token=token).offset == 0
        stated = {"Upload-Offset": "0", "Upload-Length": str(len(data))}
        given = peer.carry("PATCH", ROOT + name, stated, data[:1000], token=token)
        assert (given.code, given.offset) == (204, 1000)
        given = peer.carry("PATCH", ROOT + name, stated, data[:1000], token=token)
        assert (given.code, given.offset) == (409, 1000)
        assert peer.carry("HEAD", ROOT + name, {}, b"", token="guess").code == 401
        large = peer.carry("PATCH", ROOT + name, stated, bytes(PIECE + 1), token=token)
        assert large.code == 413
        assert peer.carry("HEAD", ROOT + name, {}, b"", token=token).offset == 1000
    finally:
        peer.close()


def test_a_node_that_is_no_central_takes_no_photo(pair):
    from fieldapp.web import create_app

    client = create_app(pair.tablet).test_client()
    assert client.patch(ROOT + "0" * 64, data=b"x").status_code == 404
    assert client.head(ROOT + "0" * 64).status_code == 404
    assert client.get(ROOT + "0" * 64).status_code == 405


class Relay:
    """A line of real TCP that is cut, with a reset, each time so many bytes went up."""

    def __init__(self, port: int, cut_after: int) -> None:
        self.port, self.cut_after = port, cut_after
        self.cuts = self.up = 0
        self._door = socket.create_server(("127.0.0.1", 0))
        self._threads: list[threading.Thread] = []
        self._ends: list[socket.socket] = []
        self._begin(self._serve)

    @property
    def own_port(self) -> int:
        return int(self._door.getsockname()[1])

    def close(self) -> None:
        for end in (self._door, *self._ends):
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
            end.close()
        for thread in self._threads:
            thread.join(20)

    def _begin(self, what, *given) -> None:
        thread = threading.Thread(target=what, args=given)
        self._threads.append(thread)
        thread.start()

    def _serve(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                near, _ = self._door.accept()
                far = socket.create_connection(("127.0.0.1", self.port))
                self._ends += [near, far]
                self._begin(self._pass, near, far, True)
                self._begin(self._pass, far, near, False)

    def _pass(self, frm: socket.socket, to: socket.socket, up: bool) -> None:
        with contextlib.suppress(OSError):
            while data := frm.recv(16 * 1024):
                to.sendall(data)
                self.up += len(data) if up else 0
                if self.up > (self.cuts + 1) * self.cut_after:
                    self.cuts += 1
                    break
        for end in (frm, to):
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
            end.close()


def test_a_line_cut_every_few_pieces_brings_all_photos_and_sends_little_twice(pair, port):
    relay = Relay(port, cut_after=3 * PIECE)
    aim(pair, relay.own_port)
    try:
        names = [photograph(pair, 1800, seed) for seed in range(2)]
        size = sum(pair.tablet.shelf.size(name) for name in names)
        assert size > 12 * PIECE
        for _ in range(60):
            with contextlib.suppress(exchange.NoContact):
                if not send_and_fetch(pair.tablet)["photos_waiting"]:
                    break
    finally:
        relay.close()
    assert all(arrived(pair, name) for name in names)
    assert relay.cuts >= 3, (relay.up, size)
    assert relay.up - size <= 0.05 * size + (relay.cuts + 1) * 2 * PIECE
