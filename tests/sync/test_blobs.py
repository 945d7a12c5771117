"""Photos on the line: in pieces, at the true offset, whole only by their hash, whatever breaks."""

import hashlib
import io
import threading
from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

from sync import blobs
from sync.blobs import LENGTH, MOST_PIECE_BYTES, NONCE, OFFSET, ROOT
from sync.endpoint import TOKEN_S, Endpoint
from sync.errors import NoContact
from sync.exchange import open_session
from sync.peer import Answer, Carried, LoopbackPeer
from sync.shelf import Shelf

from .harbour import REALM, Harbour, Node

PIECE = MOST_PIECE_BYTES


class Clock:
    """Seconds that pass when a test says so."""

    now = 1000.0

    def __call__(self) -> float:
        return self.now


def picture(size: int, seed: str = "a") -> bytes:
    """Return bytes that no two pieces of have in common."""
    steps = (hashlib.sha256(f"{seed} {n}".encode()).digest() for n in range(size // 32 + 1))
    return b"".join(steps)[:size]


def name_of(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture
def harbour(tmp_path: Path, clock: Clock) -> Harbour:
    harbour = Harbour()
    harbour.central.shelf = Shelf(tmp_path / "central")
    harbour.endpoint = Endpoint(harbour.central.replica, seconds=clock)
    return harbour


@pytest.fixture
def device(harbour: Harbour, tmp_path: Path) -> Callable[[str], Node]:
    def made(dev: str) -> Node:
        node = harbour.device(dev)
        node.shelf = Shelf(tmp_path / dev)
        return node

    return made


@pytest.fixture
def node(device) -> Node:
    return device("D-01")


class Line:
    """A line to central that counts what passes, and breaks where a test says."""

    def __init__(self, harbour: Harbour, breaks: Callable[[str, int], str] | None = None) -> None:
        self.harbour, self.breaks = harbour, breaks or (lambda _method, _number: "")
        self.pieces: list[tuple[str, int, int]] = []
        self.asked = 0
        self.lock = threading.Lock()

    def send(self, path: str, body: Mapping[str, object], *, token: str = "") -> Answer:
        return LoopbackPeer(self.harbour.endpoint, REALM).send(path, body, token=token)

    def carry(
        self, method: str, path: str, headers: Mapping[str, str], data: bytes, *, token: str = ""
    ) -> Carried:
        with self.lock:
            if method == "PATCH":
                self.pieces.append((path, int(headers[OFFSET]), len(data)))
            else:
                self.asked += 1
            fault = self.breaks(method, len(self.pieces))
        if fault == "before":
            raise NoContact("the request was lost")
        endpoint = (
            Half(self.harbour.endpoint) if fault == "in the middle" else self.harbour.endpoint
        )
        answer = LoopbackPeer(endpoint, REALM).carry(method, path, headers, data, token=token)
        if fault:
            raise NoContact("the answer was lost")
        return answer

    @property
    def bytes(self) -> int:
        return sum(size for *_, size in self.pieces)


class Half:
    """Central at the end of a line that breaks in the middle of a body."""

    def __init__(self, endpoint: Endpoint) -> None:
        self.endpoint = endpoint

    def answer(self, *asked):
        return self.endpoint.answer(*asked)

    def blob(self, method, path, headers, body):
        return self.endpoint.blob(method, path, headers, io.BytesIO(body.read(PIECE // 2)))


def whole(harbour: Harbour, name: str, data: bytes) -> bool:
    shelf = harbour.central.shelf
    return shelf.has(name) and shelf.path(name).read_bytes() == data and shelf.sound(name)


def ask(harbour: Harbour, node: Node, method: str, name: str, data: bytes = b"", **stated: object):
    """Send one request as the device; return code, offset and the sentence."""
    if not node.replica.token:
        open_session(node.replica, harbour.peer())
    headers = {OFFSET: str(stated.get("at", 0)), LENGTH: str(stated.get("length", len(data)))}
    body = stated.get("body")
    if body is None:
        got = harbour.peer().carry(method, ROOT + name, headers, data, token=node.replica.token)
        return got.code, got.offset, got.says
    sent = {
        **headers,
        "content-length": str(stated["size"]),
        "authorization": f"Bearer {node.replica.token}",
    }
    code, answered, _ = harbour.endpoint.blob(method, ROOT + name, sent, body)
    return code, int(dict(answered).get(OFFSET, -1)), ""


def tell_only(harbour: Harbour, node: Node) -> None:
    """Let central have the entries and none of the photos."""
    node.shelf, kept = Shelf(Path("/dev/null/none")), node.shelf
    harbour.sync(node)
    node.shelf = kept


# -- the whole way ---------------------------------------------------------------------------------


def test_a_photo_follows_its_entry_in_pieces_and_is_received(harbour, node):
    data = picture(3 * PIECE + 5)
    name = node.photograph(data)
    line = Line(harbour)
    report = harbour.sync(node, line)
    assert (report.waiting, report.photos_sent, report.photos_waiting) == (0, 1, 0)
    assert report.photos_say == ""
    assert [size for *_, size in line.pieces] == [PIECE, PIECE, PIECE, 5]
    assert line.asked == 0
    assert whole(harbour, name, data)


def test_a_photo_that_central_holds_is_not_sent_again(harbour, node):
    node.photograph(picture(10))
    harbour.sync(node)
    node.note("later")
    line = Line(harbour)
    assert harbour.sync(node, line).photos_waiting == 0
    assert line.pieces == []


def test_small_photos_go_before_large_ones(harbour, node):
    sizes = [4000, 300, 20]
    for size in sizes:
        node.photograph(picture(size, str(size)))
    line = Line(harbour)
    harbour.sync(node, line)
    assert {size for *_, size in line.pieces[:2]} == {20, 300}
    assert line.pieces[2][2] == 4000


def test_two_pieces_are_in_flight_at_once(harbour, node):
    for seed in "ab":
        node.photograph(picture(100, seed))
    both = threading.Barrier(2)

    class Waits(Line):
        def carry(self, *asked, **named):
            both.wait(20)
            return super().carry(*asked, **named)

    assert harbour.sync(node, Waits(harbour)).photos_sent == 2


def test_progress_is_told_in_bytes(harbour, node):
    from sync.exchange import run

    data = picture(2 * PIECE + 1)
    node.photograph(data)
    told: list[tuple[int, int]] = []
    run(node.replica, harbour.peer(), photos=lambda done, of: told.append((done, of)))
    assert told == [(n, len(data)) for n in (PIECE, 2 * PIECE, 2 * PIECE + 1)]


def test_a_run_that_is_stopped_goes_on_where_it_was(harbour, node):
    from sync.exchange import run

    data = picture(4 * PIECE)
    name = node.photograph(data)
    line = Line(harbour)
    report = run(node.replica, line, stop=lambda: len(line.pieces) >= 2)
    assert report.photos_waiting == 1
    assert harbour.central.shelf.offset(name, len(data)) == 2 * PIECE
    again = Line(harbour)
    assert harbour.sync(node, again).photos_waiting == 0
    assert [at for _, at, _ in again.pieces] == [2 * PIECE, 3 * PIECE]


# -- the line breaks -------------------------------------------------------------------------------


def test_a_dead_line_keeps_the_photo_waiting_and_the_entries_have_arrived(harbour, node):
    name = node.photograph(picture(PIECE))
    report = harbour.sync(node, Line(harbour, lambda *_: "before"))
    assert (report.waiting, report.photos_sent, report.photos_waiting) == (0, 0, 1)
    assert "No contact" in report.photos_say
    assert not harbour.central.shelf.has(name)
    assert f"photo {name[:8]}" in harbour.central.texts()
    assert harbour.sync(node).photos_waiting == 0


@pytest.mark.parametrize("fault", ["before", "in the middle", "after"])
def test_twelve_megabytes_arrive_over_a_line_that_breaks_and_little_is_sent_twice(
    harbour, node, fault
):
    data = picture(12_000_000)
    name = node.photograph(data)
    cuts = 0

    def breaks(method: str, number: int) -> str:
        nonlocal cuts
        if method == "PATCH" and number % 7 == 0:
            cuts += 1
            return fault
        return ""

    line = Line(harbour, breaks)
    while harbour.sync(node, line).photos_waiting:
        assert len(line.pieces) < 1000

    assert whole(harbour, name, data)
    assert cuts > 10
    assert line.bytes - len(data) <= 0.05 * len(data) + cuts * PIECE
    assert line.asked == cuts


def test_an_answer_that_is_lost_costs_a_question_and_no_byte(harbour, node):
    data = picture(5 * PIECE)
    node.photograph(data)
    line = Line(harbour, lambda method, number: "after" if method == "PATCH" else "")
    assert harbour.sync(node, line).photos_waiting == 0
    assert line.bytes == len(data)


def test_the_next_run_begins_where_central_says_and_asks_nothing(harbour, node):
    data = picture(6 * PIECE)
    node.photograph(data)
    harbour.sync(node, Line(harbour, lambda _, number: "before" if number > 3 else ""))
    line = Line(harbour)
    harbour.sync(node, line)
    assert [at for _, at, _ in line.pieces] == [3 * PIECE, 4 * PIECE, 5 * PIECE]
    assert line.asked == 0


def test_a_session_that_ends_in_the_middle_is_renewed_unnoticed(harbour, node, clock):
    data = picture(4 * PIECE)
    name = node.photograph(data)

    def breaks(_method: str, number: int) -> str:
        clock.now += TOKEN_S / 2
        return ""

    assert harbour.sync(node, Line(harbour, breaks)).photos_sent == 1
    assert whole(harbour, name, data)


def test_a_central_that_stops_in_the_middle_goes_on_from_what_is_on_its_disk(harbour, node):
    data = picture(3 * PIECE)
    name = node.photograph(data)
    line = Line(harbour, lambda _, number: "before" if number > 1 else "")
    harbour.sync(node, line)
    harbour.endpoint = Endpoint(harbour.central.replica)
    node.replica.token = ""
    assert harbour.sync(node).photos_waiting == 0
    assert whole(harbour, name, data)


def test_what_answers_without_the_nonce_is_not_central(harbour, node):
    class Portal(Line):
        def carry(self, method, path, headers, data, *, token=""):
            from sync.peer import carried

            return carried(204, {OFFSET.lower(): str(len(data))}, b"", "nonce")

    node.photograph(picture(10))
    report = harbour.sync(node, Portal(harbour))
    assert (report.photos_sent, report.photos_waiting) == (0, 1)
    assert "something else answered" in report.photos_say


def test_central_that_lost_a_photo_has_it_sent_again(harbour, node):
    name = node.photograph(picture(100))
    harbour.sync(node)
    harbour.central.shelf.path(name).unlink()
    report = harbour.sync(node, Line(harbour, lambda *_: "before"))
    assert (report.photos_sent, report.photos_waiting) == (0, 1), "received is taken back"
    assert harbour.sync(node).photos_sent == 1
    assert harbour.central.shelf.has(name)


# -- what central takes ----------------------------------------------------------------------------


def test_only_what_an_accepted_entry_names_is_taken(harbour, node):
    data = picture(10)
    open_session(node.replica, harbour.peer())
    assert ask(harbour, node, "PATCH", name_of(data), data)[0] == 404
    assert ask(harbour, node, "HEAD", name_of(data))[0] == 404
    node.photograph(data)
    assert ask(harbour, node, "PATCH", name_of(data), data)[0] == 404, "its entry is not here yet"
    tell_only(harbour, node)
    assert ask(harbour, node, "PATCH", name_of(data), data)[:2] == (204, 10)


@pytest.mark.parametrize("path", ["", "x", "..%2f..", "../../ledger.db", "A" * 64, "0" * 63])
def test_what_is_no_hash_is_not_found(harbour, node, path):
    assert ask(harbour, node, "PATCH", path, b"x")[0] == 404
    assert ask(harbour, node, "HEAD", path)[0] == 404


def test_without_a_session_nothing_is_taken_or_told(harbour, node):
    name = node.photograph(picture(10))
    tell_only(harbour, node)
    for token in ("", "guess", "é"):
        answer = harbour.peer().carry("HEAD", ROOT + name, {}, b"", token=token)
        assert (answer.code, answer.offset) == (401, None)


@pytest.mark.parametrize("method", ["GET", "POST", "PUT", "DELETE"])
def test_a_blob_is_only_asked_for_or_added_to(harbour, node, method):
    name = node.photograph(picture(10))
    tell_only(harbour, node)
    assert ask(harbour, node, method, name, b"x")[0] == 405


def test_a_wrong_offset_is_answered_with_the_true_one(harbour, node):
    data = picture(300)
    name = node.photograph(data)
    tell_only(harbour, node)
    assert ask(harbour, node, "HEAD", name)[:2] == (200, 0)
    assert ask(harbour, node, "PATCH", name, data[:100], length=300)[:2] == (204, 100)
    for at in (0, 50, 101, 300, 5000):
        given = ask(harbour, node, "PATCH", name, data[:10], at=at, length=300)
        assert given[:2] == (409, 100)
        assert "Go on from there" in given[2]
    assert ask(harbour, node, "HEAD", name)[:2] == (200, 100)
    assert ask(harbour, node, "PATCH", name, data[100:], at=100, length=300)[:2] == (204, 300)
    assert ask(harbour, node, "PATCH", name, data, length=300)[:2] == (409, 300)
    assert ask(harbour, node, "HEAD", name)[:2] == (200, 300)
    assert whole(harbour, name, data)


@pytest.mark.parametrize("length", [299, 301, 0, 2**40])
def test_a_length_other_than_the_entry_states_is_refused(harbour, node, length):
    data = picture(300)
    name = node.photograph(data)
    tell_only(harbour, node)
    assert ask(harbour, node, "PATCH", name, data[:10], length=length)[0] == 422
    assert ask(harbour, node, "HEAD", name)[:2] == (200, 0)


@pytest.mark.parametrize("size", [PIECE + 1, 2**40])
def test_a_piece_that_is_too_large_is_not_read(harbour, node, size):
    name = node.photograph(picture(4 * PIECE))
    tell_only(harbour, node)

    class Untouched:
        def read(self, size: int, /) -> bytes:
            raise AssertionError("the body was read")

    code, *_ = ask(harbour, node, "PATCH", name, length=4 * PIECE, body=Untouched(), size=size)
    assert code == 413


def test_more_bytes_than_the_blob_has_are_refused(harbour, node):
    data = picture(300)
    name = node.photograph(data)
    tell_only(harbour, node)
    assert ask(harbour, node, "PATCH", name, data + b"more", length=300)[0] == 422


@pytest.mark.parametrize("value", ["", "x", "-1", "1.5", "9" * 30, "١"])
def test_a_piece_without_its_place_is_malformed(harbour, node, value):
    name = node.photograph(picture(10))
    tell_only(harbour, node)
    for header in ("at", "length"):
        assert ask(harbour, node, "PATCH", name, b"x", **{"length": 10, header: value})[0] == 400


def test_wrong_bytes_never_become_the_photo_and_their_part_is_dropped(harbour, node):
    data = picture(300)
    name = node.photograph(data)
    tell_only(harbour, node)
    code, offset, says = ask(harbour, node, "PATCH", name, bytes(300))
    assert (code, offset) == (422, None)
    assert "another hash" in says
    assert not harbour.central.shelf.has(name)
    assert ask(harbour, node, "HEAD", name)[:2] == (200, 0)
    assert ask(harbour, node, "PATCH", name, data)[:2] == (204, 300)


def test_a_part_that_another_spoiled_is_sent_anew_in_the_same_run(harbour, node):
    data = picture(3 * PIECE)
    name = node.photograph(data)
    tell_only(harbour, node)
    assert ask(harbour, node, "PATCH", name, bytes(PIECE), length=3 * PIECE)[0] == 204
    report = harbour.sync(node)
    assert (report.photos_sent, report.photos_say) == (1, "")
    assert whole(harbour, name, data)


def test_a_photo_damaged_on_the_device_is_said_and_holds_up_no_other(harbour, node):
    bad, good = node.photograph(picture(50, "bad")), node.photograph(picture(90, "good"))
    node.shelf.path(bad).write_bytes(bytes(50))
    report = harbour.sync(node)
    assert (report.photos_sent, report.photos_waiting) == (1, 1)
    assert f"{bad[:8]} is damaged on this device" in report.photos_say
    assert harbour.central.shelf.has(good)
    assert not harbour.central.shelf.has(bad)


def test_one_device_finishes_what_another_began(harbour, node, device):
    other = device("D-02")
    data = picture(3 * PIECE)
    name = node.photograph(data)
    assert other.photograph(data) == name
    harbour.sync(node, Line(harbour, lambda _, number: "before" if number > 1 else ""))
    line = Line(harbour)
    assert harbour.sync(other, line).photos_sent == 1
    assert [at for _, at, _ in line.pieces] == [PIECE, 2 * PIECE]
    again = Line(harbour)
    report = harbour.sync(node, again)
    assert (report.photos_sent, report.photos_waiting, again.pieces) == (0, 0, [])


def test_two_devices_send_the_same_photo_at_once_and_it_is_whole(harbour, device):
    data = picture(12 * PIECE)
    nodes = [device(f"D-0{n}") for n in range(2, 5)]
    for one in nodes:
        one.photograph(data)
        tell_only(harbour, one)
    begin = threading.Barrier(len(nodes))

    def send(one: Node) -> None:
        begin.wait(20)
        for _ in range(20):
            if not harbour.sync(one).photos_waiting:
                return

    threads = [threading.Thread(target=send, args=(one,)) for one in nodes]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert whole(harbour, name_of(data), data)
    assert [len(blobs.waiting(one.db, one.own_logs(one.db))) for one in nodes] == [0, 0, 0]


def test_a_newer_request_ends_the_older_and_no_byte_is_mixed(harbour, node):
    data = picture(1000)
    name = node.photograph(data)
    tell_only(harbour, node)
    open_session(node.replica, harbour.peer())
    reading, go_on, answered = threading.Event(), threading.Event(), []

    class Slow:
        """A body that stands still after its first hundred bytes."""

        parts = iter((data[:100], None, bytes(100)))

        def read(self, size: int, /) -> bytes:
            part = next(self.parts, b"")
            if part is None:
                reading.set()
                assert go_on.wait(20)
                part = next(self.parts)
            return part

    older = threading.Thread(
        target=lambda: answered.append(
            ask(harbour, node, "PATCH", name, length=1000, body=Slow(), size=1000)
        )
    )
    older.start()
    assert reading.wait(20)
    assert ask(harbour, node, "PATCH", name, data, length=1000)[:2] == (409, 100)
    assert ask(harbour, node, "PATCH", name, data[100:500], at=100, length=1000)[:2] == (204, 500)
    go_on.set()
    older.join(20)
    assert answered[0][:2] == (409, 500)
    assert ask(harbour, node, "PATCH", name, data[500:], at=500, length=1000)[:2] == (204, 1000)
    assert whole(harbour, name, data)


def test_a_body_that_breaks_off_keeps_what_came(harbour, node):
    data = picture(1000)
    name = node.photograph(data)
    tell_only(harbour, node)
    given = ask(harbour, node, "PATCH", name, length=1000, body=io.BytesIO(data[:123]), size=1000)
    assert given[:2] == (204, 123)
    assert ask(harbour, node, "PATCH", name, data[123:], at=123, length=1000)[:2] == (204, 1000)
    assert whole(harbour, name, data)


def test_a_body_that_drips_without_end_is_ended(harbour, node, clock):
    data = picture(1000)
    name = node.photograph(data)
    tell_only(harbour, node)

    class Drips:
        at = 0

        def read(self, size: int, /) -> bytes:
            clock.now += 30
            self.at += 1
            return data[self.at - 1 : self.at]

    given = ask(harbour, node, "PATCH", name, length=1000, body=Drips(), size=1000)
    assert given[:2] == (204, 5)


def test_a_central_without_room_says_so_and_the_photo_waits(harbour, node, monkeypatch):
    import errno

    node.photograph(picture(100))

    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "no space left")

    monkeypatch.setattr(harbour.central.shelf, "grow", full)
    report = harbour.sync(node)
    assert (report.waiting, report.photos_waiting) == (0, 1)
    assert "no room" in report.photos_say


def test_a_photo_larger_than_any_of_ours_is_named_and_never_asked_for(harbour, node):
    entry = {"h": "0" * 64, "n": 10**9, "t": "image/jpeg"}
    with node.transaction() as db:
        node.write(db, "note.made", {"text": "large"}, blobs=[entry])
    report = harbour.sync(node)
    assert (report.waiting, report.photos_waiting) == (0, 0)
    assert ask(harbour, node, "HEAD", "0" * 64)[0] == 404


@pytest.mark.parametrize(
    "odd",
    ["text", [5], [{}], [{"h": 5, "n": 1, "t": "x"}], [{"h": "../x", "n": 1, "t": "x"}],
     [{"h": "0" * 64, "n": "1", "t": "x"}], [{"h": "0" * 64, "n": -1, "t": "x"}],
     [{"h": "0" * 64, "n": True, "t": "x"}], [{"h": "0" * 64, "n": 1}]],
)  # fmt: skip
def test_odd_names_of_blobs_hurt_no_transfer(harbour, node, odd):
    with node.transaction() as db:
        node._append(db, node.own_logs(db)[-1], "note.made", {"text": "odd"}, raw_blobs=odd)
    report = harbour.sync(node)
    assert (report.waiting, report.photos_waiting, report.refused) == (0, 0, [])


def test_a_photo_named_by_an_entry_that_lost_its_place_is_named_by_what_carries_it(
    harbour, node, tmp_path
):
    node.note("first")
    harbour.sync(node)
    copy = node.snapshot()
    node.note("on the other branch")
    harbour.sync(node)
    node.restore(copy)
    data = picture(200)
    name = node.photograph(data)
    for _ in range(3):
        report = harbour.sync(node)
    assert (report.waiting, report.photos_waiting) == (0, 0)
    assert whole(harbour, name, data)
    logs = {
        log for (log,) in harbour.central.db.execute("SELECT log FROM blob WHERE h = ?", (name,))
    }
    assert node.own_logs(node.db)[-1] in logs, "the new log names it"


def test_the_answer_to_another_request_is_not_believed(harbour, node):
    headers = {NONCE: "mine"}
    name = node.photograph(picture(10))
    tell_only(harbour, node)
    code, answered, _ = harbour.endpoint.blob(
        "HEAD", ROOT + name, {**headers, "authorization": f"Bearer {node.replica.token}"},
        io.BytesIO(),
    )  # fmt: skip
    assert (code, dict(answered)[NONCE]) == (200, "mine")
