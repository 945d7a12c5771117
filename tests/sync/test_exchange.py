"""The contract of replication, the same over loopback, over HTTP and over a line full of faults."""

import json
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager, suppress

import pytest

from sync import device, ledger, wire
from sync.entry import Entry, b64, compose, digest, new_log_id, pae, reveal
from sync.errors import NoContact, Refused
from sync.exchange import SyncReport, clock_checked, enrol, run
from sync.keys import DeviceKey
from sync.peer import Answer, Peer
from sync.pull import Run
from sync.replica import Moment, Pin

from .harbour import REALM, Harbour, Node
from .peers import FAULTS, FaultyPeer, over_http, over_loopback, seeded

LINES = ["loopback", "http", *(f"faulty {seed}" for seed in range(1, 9))]


class Line:
    """A harbour and one way to its central, patient with faults."""

    def __init__(self, harbour: Harbour, peer: Peer) -> None:
        self.harbour, self.peer = harbour, peer
        self.fell = False  # until a device hears of it, its acknowledgements speak of before

    def drain(self, *nodes: Node) -> SyncReport:
        """Try again and again until nothing of any device waits and nothing is left to pull."""
        report = None
        for node in nodes:
            for _ in range(60):
                with suppress(NoContact):
                    report = run(node.replica, self.peer)
                    assert_no_false_acknowledgement(node, self.harbour.central)
                    break
                if not self.fell:
                    assert_no_false_acknowledgement(node, self.harbour.central)
            else:
                pytest.fail("the line never let anything through")
        assert report is not None
        return report


def assert_no_false_acknowledgement(node: Node, central: Node) -> None:
    for log in node.own_logs(node.db):
        noted = ledger.acknowledged(node.db, log)
        if noted is not None:
            assert ledger.hash_at(central.db, log, noted.seq) == noted.hash


@contextmanager
def opened(kind: str, harbour: Harbour) -> Iterator[Peer]:
    if kind.startswith("faulty"):
        yield FaultyPeer(lambda: harbour.endpoint, REALM, seeded(int(kind[7:]), 0.3))
        return
    way = over_http if kind == "http" else over_loopback
    with way(lambda: harbour.endpoint, REALM) as peer:
        yield peer


@pytest.fixture(params=LINES)
def line(request) -> Iterator[Line]:
    harbour = Harbour()
    with opened(request.param, harbour) as peer:
        yield Line(harbour, peer)


def test_everything_arrives_once_and_is_acknowledged(line):
    node = line.harbour.device("D-01")
    facts = {node.note(f"fact {n}", private={"name": f"N{n}"}) for n in range(30)}
    report = line.drain(node)
    assert report.waiting == 0
    assert line.harbour.central.facts() == facts
    assert len(line.harbour.central.texts()) == 30
    for log in node.own_logs(node.db):
        assert ledger.head(node.db, log) == ledger.head(line.harbour.central.db, log)


def test_more_than_one_exchange_can_hold_arrives_whole(line):
    node = line.harbour.device("D-01")
    facts = {node.note(f"fact {n}") for n in range(wire.MOST_ENTRIES + 30)}
    line.drain(node)
    assert line.harbour.central.facts() == facts


def test_facts_saved_between_runs_arrive_too(line):
    node, facts = line.harbour.device("D-01"), set()
    for n in range(4):
        facts.add(node.note(f"fact {n}"))
        line.drain(node)
    assert line.harbour.central.facts() == facts


def test_what_one_device_saw_reaches_the_others_of_its_route(line):
    one = line.harbour.device("D-01", "route:1")
    two = line.harbour.device("D-02", "route:1")
    facts = {one.note(f"fact {n}", "route:1", private={"name": "N"}) for n in range(20)}
    line.drain(one)
    line.drain(two)
    assert two.facts() == facts
    assert line.drain(two).pulled == 0


def test_a_device_restored_from_a_copy_loses_nothing(line):
    node = line.harbour.device("D-01")
    node.note("before")
    copy = node.snapshot()
    node.note("after")
    line.drain(node)
    node.restore(copy)
    node.note("since the restore")
    line.drain(node)
    assert line.harbour.central.texts() == ["after", "before", "since the restore"]
    assert node.texts() == ["after", "before", "since the restore"]


def test_a_cloned_device_loses_nothing(line):
    node = line.harbour.device("D-01")
    node.note("before")
    line.drain(node)
    twin = node.clone()
    node.note("first machine")
    twin.note("second machine")
    line.drain(node, twin)
    assert line.harbour.central.texts() == ["before", "first machine", "second machine"]


def test_a_central_restored_from_a_copy_is_filled_again(line):
    node = line.harbour.device("D-01")
    node.note("before")
    line.drain(node)
    copy = line.harbour.central.snapshot()
    node.note("after")
    line.drain(node)
    line.harbour.restore_central(copy)
    line.fell = True
    assert line.harbour.central.texts() == ["before"]
    line.drain(node)
    assert line.harbour.central.texts() == ["after", "before"]


def test_a_device_enrols_with_a_code_that_works_once(line):
    node = Node("D-09")
    line.harbour.central.codes.add("0123")
    told = None
    for _ in range(20):
        # A lost answer leaves the code used: people then make a new one.
        line.harbour.central.codes.add("0123")
        with suppress(NoContact):
            told = enrol(line.peer, REALM, node.key, "D-09", "0123")
            break
    assert told is not None
    assert told["public_key"] == b64(line.harbour.central.key.public)
    node.pin = Pin("", told["dev"], line.harbour.central.key.public)
    node.note("first fact")
    line.drain(node)
    assert line.harbour.central.texts() == ["first fact"]


def test_every_kind_of_fault_happened_on_the_faulty_lines():
    # The test of the test: a line without faults would prove nothing.
    happened = set()
    for seed in range(1, 9):
        harbour = Harbour()
        peer = FaultyPeer(lambda harbour=harbour: harbour.endpoint, REALM, seeded(seed, 0.3))
        node = harbour.device("D-01")
        node.note("fact")
        Line(harbour, peer).drain(node)
        happened |= set(peer.happened)
    assert len(happened & set(FAULTS)) >= 5


def test_one_clean_run_takes_few_round_trips():
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("fact")
    peer = FaultyPeer(lambda: harbour.endpoint, REALM, iter(()))
    run(node.replica, peer)
    first = len(peer.old)
    node.note("another")
    run(node.replica, peer)
    # A session is two calls, its clock reading needs one more exchange; later one is enough.
    assert (first, len(peer.old) - first) == (4, 1)


def test_a_run_tells_its_progress_and_stops_when_asked():
    harbour = Harbour()
    node = harbour.device("D-01")
    for n in range(wire.MOST_ENTRIES * 2):
        node.note(f"fact {n}")
    told: list[tuple[int, int]] = []
    report = run(
        node.replica,
        harbour.peer(),
        progress=lambda done, of: told.append((done, of)),
        stop=lambda: bool(told),
    )
    assert len(told) == 1
    assert 0 < told[0][0] < told[0][1]
    assert report.waiting > 0
    assert harbour.sync(node).waiting == 0


# -- what central does not take, and what that does not hinder ---------------------------------


def forged(node: Node, **fields: object) -> Entry:
    """Sign an entry that follows the device's head, whatever it says."""
    log = node.own_logs(node.db)[-1]
    head = ledger.head(node.db, log)
    assert head is not None
    place = {"log": log, "seq": head.seq + 1, "prev": b64(head.hash), "dev": node.dev}
    return compose(REALM, node.key, {**place, "kind": "note.made", "data": {}, **fields})


def push(harbour: Harbour, node: Node, *entries: Entry, first: int = 0) -> dict:
    """Send entries straight to central and return its answer."""
    harbour.sync(node)
    request = device.ask(node.replica, Run())
    log = entries[0].log
    piece = {"log": log, "first": first or entries[0].seq, "entries": wire.pack_all(entries)}
    request["push"] = [piece]
    answer = harbour.peer().send(
        "/sync/v1/exchange", {**request, "nonce": "n"}, token=node.replica.token
    )
    assert answer.code == 200, answer
    return answer.body


@pytest.fixture
def pair() -> tuple[Harbour, Node]:
    harbour = Harbour()
    node = harbour.device("D-01", seed=1)
    node.note("fact")
    harbour.sync(node)
    return harbour, node


def test_a_gap_is_refused_with_centrals_head(pair):
    harbour, node = pair
    entry = forged(node)
    late = forged(node, seq=entry.seq + 1, prev=b64(entry.hash))
    answer = push(harbour, node, late)
    assert [(r["why"], r["seq"]) for r in answer["refused"]] == [("gap", entry.seq - 1)]


@pytest.mark.parametrize(
    ("change", "why"),
    [
        ({"s": b64(bytes(64))}, "unsigned"),
        ({"s": "!"}, "unsigned"),
        ({"b": "{}"}, "unsigned"),
        ({"b": ""}, "unsigned"),
        ({"p": '{"name":"X"}'}, "unsigned"),
    ],
)
def test_what_does_not_hold_is_refused_and_what_came_before_it_is_kept(pair, change, why):
    harbour, node = pair
    good = forged(node)
    bad = forged(node, seq=good.seq + 1, prev=b64(good.hash))
    request = device.ask(node.replica, Run())
    request["push"] = [
        {
            "log": good.log,
            "first": good.seq,
            "entries": [wire.pack(good), {**wire.pack(bad), **change}],
        }
    ]
    body = {**request, "nonce": "n"}
    answer = harbour.peer().send("/sync/v1/exchange", body, token=node.replica.token).body
    assert [(r["why"], r["at"]) for r in answer["refused"]] == [(why, bad.seq)]
    assert ledger.head(harbour.central.db, good.log) == ledger.Head(good.seq, good.hash)


def test_another_devices_entry_is_refused_though_it_is_well_signed(pair):
    harbour, node = pair
    other = harbour.device("D-02", seed=2)
    harbour.sync(other)
    answer = push(harbour, node, forged(other))
    assert [r["why"] for r in answer["refused"]] == ["not-yours"]
    answer = push(harbour, node, forged(node, dev="D-02"))
    assert [r["why"] for r in answer["refused"]] == ["not-yours"]


def test_a_key_that_nobody_enrolled_is_refused(pair):
    harbour, node = pair
    node.key = DeviceKey.generate()
    entry = forged(node)
    node.key = DeviceKey.from_seed(bytes([1]) * 32)
    assert [r["why"] for r in push(harbour, node, entry)["refused"]] == ["not-enrolled"]


@pytest.mark.parametrize(
    "change",
    [
        {"kind": "note.made"},
        {"data": {"public_key": b64(bytes(32))}},
        {"data": "nonsense"},
        {"prev": b64(bytes(32))},
    ],
)
def test_a_log_is_opened_by_its_own_key_and_nothing_else(pair, change):
    harbour, node = pair
    data = {"public_key": b64(node.key.public), "why": "first"}
    fields = {"log": new_log_id(), "seq": 1, "prev": "", "kind": "log.opened", "data": data}
    answer = push(harbour, node, forged(node, **{**fields, **change}))
    assert [r["why"] for r in answer["refused"]] == ["unsigned"]
    assert push(harbour, node, forged(node, **fields))["refused"] == []


def test_an_oversize_body_is_refused_alone(pair):
    harbour, node = pair
    entry = forged(node)
    body = entry.body.replace(b'"data":{}', b'"data":{"x":"' + b"x" * 33_000 + b'"}')
    signature = node.key.sign(pae(REALM.entry_type, body))
    big = Entry(entry.log, entry.seq, digest(REALM, body), body, signature)
    answer = push(harbour, node, big)
    assert "33" in answer["refused"][0]["says"]
    assert harbour.sync(node).waiting == 0


@pytest.mark.parametrize(
    "data", [{}, {"text": 5}, {"text": [[]]}, {"text": {"a": {}}}, "no object", [1, 2]]
)
def test_a_poison_entry_passes_and_blocks_nothing(pair, data):
    harbour, node = pair
    with node.transaction() as db:
        node._append(db, node.own_logs(db)[-1], "kind.of-tomorrow", {})
        entry = forged(node, kind="kind.of-tomorrow", data=data)
        ledger.add(db, entry, at="t", frm="D-01")
    node.note("after the poison")
    report = harbour.sync(node)
    assert (report.waiting, report.refused) == (0, [])
    assert "after the poison" in harbour.central.texts()


def test_one_bad_log_never_blocks_the_others(pair):
    harbour, node = pair
    bad = node.own_logs(node.db)[-1]
    node.note("in the bad log")
    with node.transaction() as db:
        node.open_log(db, "restored")
    node.note("in the good log")
    node.db.execute("DROP TRIGGER entry_never_update")
    node.db.execute(
        "UPDATE entry SET sig = zeroblob(64) WHERE log = ? AND seq = "
        "(SELECT MAX(seq) FROM entry WHERE log = ?)",
        (bad, bad),
    )
    report = harbour.sync(node)
    assert harbour.central.texts() == ["fact", "in the good log"]
    assert [(r["log"], r["why"]) for r in report.refused] == [(bad, "unsigned")]
    assert report.waiting == 1
    # And it stays on the device.
    assert "in the bad log" in node.texts()


def test_a_fault_in_centrals_page_tables_blocks_nothing_and_is_listed(pair):
    harbour, node = pair
    follow = harbour.central.follow

    def stumble(db, entries):
        follow(db, entries)
        if any(entry.fields()["data"].get("text") == "odd" for entry in entries):
            raise ValueError("a bug in a page table")

    harbour.central.follow = stumble
    node.note("before")
    odd = node.note("odd")
    node.note("after")
    report = harbour.sync(node)
    assert (report.waiting, report.refused) == (0, [])
    assert harbour.central.texts() == ["after", "before", "fact"]
    rows = harbour.central.db.execute("SELECT hash, says FROM unfollowed").fetchall()
    assert rows == [(odd, "ValueError: a bug in a page table")]
    assert ledger.find(harbour.central.db, odd) is not None


def test_a_full_disk_at_central_is_no_odd_data_and_takes_nothing(pair):
    harbour, node = pair

    def stumble(db, entries):
        raise sqlite3.OperationalError("database or disk is full")

    harbour.central.follow = stumble
    node.note("new")
    with pytest.raises(sqlite3.OperationalError):
        harbour.sync(node)
    assert harbour.central.texts() == ["fact"]
    del harbour.central.follow
    assert harbour.sync(node).waiting == 0


def test_a_pulled_entry_of_an_unknown_key_waits_and_blocks_no_other_log(pair):
    harbour, node = pair
    other, third = harbour.device("D-02", "r", seed=2), harbour.device("D-03", "r", seed=3)
    harbour.central.grant("D-01", "r")
    node.asks = ["r"]
    facts = [other.note("known", "r"), third.note("not yet known", "r")]
    harbour.sync(other)
    harbour.sync(third)
    known = node.public_key
    node.public_key = lambda db, dev, key: None if dev == "D-03" else known(db, dev, key)
    report = harbour.sync(node)
    assert facts[0] in node.facts()
    assert facts[1] not in node.facts()
    assert [r["why"] for r in report.refused] == ["unverified"]
    node.public_key = known
    assert harbour.sync(node).refused == []
    assert facts[1] in node.facts()


# -- what a device does not believe --------------------------------------------------------------


class Altering:
    """A peer whose answers to an exchange are altered on the way."""

    def __init__(self, peer: Peer, alter) -> None:
        self.peer, self.alter = peer, alter

    def send(self, path, body, *, token=""):
        answer = self.peer.send(path, body, token=token)
        if path.endswith("exchange"):
            changed = json.loads(json.dumps(answer.body))
            self.alter(changed)
            return Answer(answer.code, changed)
        return answer


def forge_note(body):
    note = body["acknowledgements"][0]
    note["seq"] += 1


def swap_signer(body):
    note = body["acknowledgements"][0]
    note["key"] = DeviceKey.generate().id


@pytest.mark.parametrize(
    "alter",
    [
        forge_note,
        swap_signer,
        lambda body: body["acknowledgements"][0].update(sig=b64(bytes(64))),
        lambda body: body["acknowledgements"].append("nonsense"),
        lambda body: body.pop("heads"),
        lambda body: body.update(heads=[1]),
        lambda body: body["heads"].update({next(iter(body["heads"])): {"seq": "x"}}),
        lambda body: body.update(nonce="of another"),
        lambda body: body.update(refused="x"),
        lambda body: body.update(pull=[{"scope": "all"}]),
        lambda body: body.update(denied=[[]]),
    ],
)
def test_an_altered_answer_is_no_contact_and_nothing_shows_as_received(pair, alter):
    harbour, node = pair
    fact = node.note("new")
    with pytest.raises(NoContact, match="What waits is kept"):
        run(node.replica, Altering(harbour.peer(), alter))
    noted = ledger.acknowledged(node.db, node.own_logs(node.db)[-1])
    assert noted is not None
    if noted.seq == 4:  # altered beyond the acknowledgement, which did hold
        assert fact in harbour.central.facts()
    assert harbour.sync(node).waiting == 0


def test_a_pulled_entry_altered_on_the_way_is_not_borrowed(pair):
    harbour, node = pair
    harbour.central.note("from central", "all")

    def alter(body):
        for piece in body["pull"]:
            for packed in piece["entries"]:
                packed["b"] = packed["b"].replace("from central", "from nobody!")

    report = run(node.replica, Altering(harbour.peer(), alter))
    assert [r["why"] for r in report.refused] == ["unverified"]
    assert "from nobody!" not in node.texts()
    harbour.sync(node)
    assert "from central" in node.texts()


def test_another_central_is_not_believed(pair):
    _, node = pair
    other = Harbour()
    other.central.key = DeviceKey.generate()
    node.replica.token = ""
    with pytest.raises(NoContact, match="another central"):
        other.sync(node)


def test_a_device_that_is_enrolled_nowhere_is_told_so():
    with pytest.raises(Refused, match="Enrol it first"):
        Harbour().sync(Node("D-01"))


# -- time and private parts ----------------------------------------------------------------------


def test_a_session_writes_down_what_centrals_clock_said(pair):
    harbour, node = pair
    log = node.own_logs(node.db)[-1]
    kinds = [entry.fields()["kind"] for entry in ledger.read(harbour.central.db, log, 1, 99)]
    assert kinds == ["log.opened", "note.made", "clock.checked"]


def test_the_offset_between_two_clocks_is_told_in_milliseconds():
    before = Moment("2031-05-04T06:30:00.000Z", 0, 1000, "b")
    after = Moment("2031-05-04T06:30:00.400Z", 0, 1400, "b")
    told = clock_checked("2031-05-04T06:29:58.200Z", before, after)
    assert told == {"central_at": "2031-05-04T06:29:58.200Z", "rtt_ms": 400, "offset_ms": 2000}
    rebooted = Moment(after.at, 0, 5, "c")
    assert clock_checked("x", before, rebooted) == {"central_at": "x"}


def test_a_clock_that_says_1970_does_not_lock_a_device_out(pair):
    harbour, node = pair
    node.moment = lambda: Moment("1970-01-01T00:00:00.000Z", 0, 5, "b1")
    node.replica.token = ""
    node.note("in the seventies")
    assert harbour.sync(node).waiting == 0
    assert "in the seventies" in harbour.central.texts()


def test_private_parts_reach_those_who_see_residents_and_nobody_else(pair):
    harbour, node = pair
    sees, blind = harbour.device("D-02", "route:1"), harbour.device("D-03", "route:1")
    harbour.central.blind.add("D-03")
    harbour.central.grant("D-01", "route:1")
    fact = node.note("visit", "route:1", private={"name": "A. Nobody"})
    for one in (node, sees, blind):
        harbour.sync(one)
    for one in (harbour.central, sees):
        held = ledger.find(one.db, fact)
        assert held is not None
        assert held.private is not None
        assert reveal(held.private) == {"name": "A. Nobody"}
    assert blind.facts() == {fact}
    assert blind.db.execute("SELECT COUNT(*) FROM private").fetchone() == (0,)
