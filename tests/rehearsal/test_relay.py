"""The line of the demo: it carries every byte, breaks where it is told to, and comes back."""

import contextlib
import socket
import threading
from collections.abc import Iterator

import pytest

from fieldapp.rehearsal.relay import Relay

PATIENCE_S = 10


@pytest.fixture
def far() -> Iterator[int]:
    """Answer on a port with the bytes that come, as far as anybody listens."""
    listener = socket.create_server(("127.0.0.1", 0))
    listener.settimeout(PATIENCE_S)
    held: list[socket.socket] = []
    threads: list[threading.Thread] = []

    def echo(line: socket.socket) -> None:
        with contextlib.suppress(OSError):
            while data := line.recv(4096):
                line.sendall(data)
            line.shutdown(socket.SHUT_WR)

    def meet() -> None:
        with contextlib.suppress(OSError):
            while True:
                line, _ = listener.accept()
                held.append(line)
                threads.append(threading.Thread(target=echo, args=(line,)))
                threads[-1].start()

    meeting = threading.Thread(target=meet)
    meeting.start()
    yield listener.getsockname()[1]
    with contextlib.suppress(OSError):
        listener.shutdown(socket.SHUT_RDWR)
    listener.close()
    meeting.join(PATIENCE_S)
    for thread in threads:
        thread.join(PATIENCE_S)
    for line in held:
        line.close()


@pytest.fixture
def relay(far: int) -> Iterator[Relay]:
    with Relay(far) as line:
        yield line


def said_back(relay: Relay, data: bytes) -> bytes:
    """Send the bytes over the line, end, and return what came back until it ended or broke."""
    back = b""
    with socket.create_connection(("127.0.0.1", relay.port), PATIENCE_S) as line:
        try:
            line.sendall(data)
            line.shutdown(socket.SHUT_WR)
            while more := line.recv(4096):
                back += more
        except TimeoutError:
            raise
        except OSError:
            pass  # broken: what came before stands
    return back


def test_every_byte_goes_both_ways_and_is_counted(relay: Relay) -> None:
    data = bytes(range(256)) * 4000
    assert said_back(relay, data) == data
    told = relay.told()
    assert (told.up, told.to_central, told.to_tablet) == (True, len(data), len(data))


def test_a_cut_line_lets_nothing_through_and_a_restored_one_does(relay: Relay) -> None:
    relay.cut()
    assert said_back(relay, b"bottle") == b""
    assert (relay.told().up, relay.told().to_central) == (False, 0)
    relay.restore()
    assert said_back(relay, b"bottle") == b"bottle"


def test_a_cut_breaks_what_runs_over_the_line(relay: Relay) -> None:
    with socket.create_connection(("127.0.0.1", relay.port), PATIENCE_S) as line:
        line.sendall(b"bottle")
        assert line.recv(6, socket.MSG_WAITALL) == b"bottle"
        assert relay.told().open == 1
        relay.cut()
        with contextlib.suppress(ConnectionError):
            assert line.recv(1) == b""
    assert relay.told().open == 0


@pytest.mark.parametrize(("way", "came"), [("to_central", b"bot"), ("to_tablet", b"bot")])
def test_the_line_breaks_by_itself_after_so_many_bytes(way: str, came: bytes, relay: Relay) -> None:
    relay.cut_after(3, way)
    assert came.startswith(said_back(relay, b"bottle"))
    told = relay.told()
    assert (told.up, told.cuts, getattr(told, way)) == (False, 1, 3)


def test_a_line_cut_twice_was_cut_once(relay: Relay) -> None:
    relay.cut()
    relay.cut()
    assert relay.told().cuts == 1


def test_a_restored_line_forgets_that_it_was_to_break(relay: Relay) -> None:
    relay.cut_after(3)
    relay.restore()
    assert said_back(relay, b"bottle") == b"bottle"


def test_a_central_that_is_gone_is_a_line_that_ends(relay: Relay) -> None:
    with socket.create_server(("127.0.0.1", 0)) as gone:
        port = gone.getsockname()[1]
    with Relay(port) as line:
        assert said_back(line, b"bottle") == b""
        assert line.told().up is True


def test_a_closed_line_gives_its_port_back(far: int) -> None:
    with Relay(far) as line:
        port = line.port
        assert said_back(line, b"bottle") == b"bottle"
    with pytest.raises(ConnectionError):
        socket.create_connection(("127.0.0.1", port), PATIENCE_S)
    with Relay(far, port=port) as again:
        assert again.port == port


def test_a_taken_port_is_said_and_leaves_nothing_behind(far: int) -> None:
    before = threading.active_count()
    with pytest.raises(OSError, match="in use"):
        Relay(far, port=far)
    assert threading.active_count() == before
