"""Restored, cloned and forgotten: what each side does when histories no longer agree."""

import sqlite3

import pytest

from sync import ledger
from sync.adopt import carried, carry
from sync.encoding import b64
from sync.entry import CARRIED, MOST_READ, compose, new_log_id, reveal, verify
from sync.errors import BadEntry, NoContact
from sync.exchange import run
from sync.peer import Peer
from sync.verify import verify_folder

from .harbour import REALM, Harbour, Node
from .scenarios import LONG_STORIES, STORIES


@pytest.mark.parametrize("story", [*STORIES, *LONG_STORIES], ids=lambda story: story.__name__)
def test_nothing_is_lost_when(story):
    story()


def reasons(node: Node) -> list[str]:
    rows = node.db.execute("SELECT body FROM entry WHERE seq = 1")
    found = [ledger.find(node.db, h) for (h,) in node.db.execute("SELECT hash FROM entry")]
    assert rows is not None
    return sorted(
        entry.fields()["data"]["why"]
        for entry in found
        if entry is not None and entry.fields()["kind"] == "log.opened"
    )


def test_a_restored_device_opens_a_new_log_and_says_why():
    harbour = Harbour()
    node = harbour.device("D-01")
    copy = node.snapshot()
    node.note("fact")
    harbour.sync(node)
    node.restore(copy)
    report = harbour.sync(node)
    assert reasons(node) == ["behind", "first"]
    assert (report.carried, report.waiting) == (0, 0)


def test_a_forked_device_keeps_its_own_branch_and_carries_it_over_with_proof():
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    twin = node.clone()
    node.note("first machine")
    harbour.sync(node)
    fact = twin.note("second machine", "route:1", private={"name": "A. Nobody"})
    report = harbour.sync(twin)
    assert (report.carried, report.waiting) == (1, 0)
    assert reasons(twin) == ["first", "fork"]
    own = twin.own_logs(twin.db)[0]
    kept = twin.db.execute("SELECT 1 FROM entry WHERE log = ? AND hash = ?", (own, fact))
    assert kept.fetchone() is not None
    parcel = next(
        entry
        for log in ledger.logs(harbour.central.db)
        for entry in ledger.read(harbour.central.db, log, 1, 99)
        if entry.fields()["kind"] == CARRIED
    )
    inner = carried(REALM, parcel.fields())
    assert inner.hash == fact
    assert verify(REALM, inner, twin.key.public)["data"] == {"text": "second machine"}
    assert parcel.fields()["refs"] == [b64(fact)]
    # The private part and the scope of what is inside travel with the parcel.
    assert parcel.private is not None
    assert reveal(parcel.private) == {"name": "A. Nobody"}
    assert parcel in ledger.scoped(harbour.central.db, "route:1", {}, 99)


def test_central_keeps_the_losing_branch_as_evidence_and_off_its_pages():
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    twin = node.clone()
    node.note("first machine")
    harbour.sync(node)
    fact = twin.note("second machine")
    harbour.sync(twin)
    rows = harbour.central.db.execute("SELECT hash, stated FROM branch").fetchall()
    assert (fact, 0) in rows
    assert harbour.central.texts().count("second machine") == 1


def test_a_long_original_is_carried_deflated_and_comes_out_the_same():
    node = Node("D-01")
    text = "".join(chr(0x4E00 + n % 5000) for n in range(7_000))
    fields = {"log": new_log_id(), "seq": 1, "prev": "", "dev": "D-01", "kind": "protocol.kept"}
    entry = compose(REALM, node.key, {**fields, "data": {"toml": text}}, limit=24 * 1024)
    assert len(entry.body) > 20_000
    data = carry(entry)
    assert "deflated" in data
    with node.transaction() as db:
        parcel = node.write(db, CARRIED, data)
    assert len(parcel.body) < MOST_READ
    assert carried(REALM, parcel.fields()).body == entry.body


@pytest.mark.parametrize(
    "data",
    [{}, "x", {"orig": 1, "sig": "A"}, {"orig": "{}", "sig": "!"}, {"deflated": "AAAA", "sig": ""}],
)
def test_a_parcel_with_nothing_readable_inside_is_refused(data):
    with pytest.raises(BadEntry):
        carried(REALM, {"kind": CARRIED, "data": data})


class Cut:
    """A line that fails after so many calls."""

    def __init__(self, peer: Peer, calls: int) -> None:
        self.peer, self.calls = peer, calls

    def send(self, path, body, *, token=""):
        if self.calls == 0:
            raise NoContact("the line was cut")
        self.calls -= 1
        return self.peer.send(path, body, token=token)


def test_received_goes_back_to_waiting_when_central_was_restored():
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    copy = harbour.central.snapshot()
    fact = node.note("fact")
    harbour.sync(node)
    assert ledger.received(node.db, fact)
    harbour.restore_central(copy)
    # The old session is refused and a new one takes two calls; the next answer tells of the loss.
    with pytest.raises(NoContact):
        run(node.replica, Cut(harbour.peer(), 4))
    assert not ledger.received(node.db, fact)
    report = harbour.sync(node)
    assert (report.waiting, ledger.received(node.db, fact)) == (0, True)


def test_an_entry_of_a_losing_history_is_received_only_with_the_one_that_carries_it():
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    twin = node.clone()
    for n in range(3):
        node.note(f"first {n}")
    harbour.sync(node)
    fact = twin.note("second")
    # After the session's two calls one exchange tells of the fork and one brings the history.
    with pytest.raises(NoContact):
        run(twin.replica, Cut(harbour.peer(), 4))
    assert ledger.carried_by(twin.db, fact) is not None
    assert not ledger.received(twin.db, fact)
    harbour.sync(twin)
    assert ledger.received(twin.db, fact)


@pytest.mark.parametrize("story", ["clone", "restore", "central"])
def test_both_folders_still_verify_afterwards(tmp_path, story):
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("before")
    harbour.sync(node)
    copy, central_copy, twin = node.snapshot(), harbour.central.snapshot(), node.clone()
    node.note("first")
    harbour.sync(node)
    if story == "clone":
        node = twin
        node.note("second")
    elif story == "restore":
        node.restore(copy)
        node.note("since")
    else:
        harbour.restore_central(central_copy)
    assert harbour.sync(node).waiting == 0
    for one in (node, harbour.central):
        folder = tmp_path / one.dev
        folder.mkdir()
        target = sqlite3.connect(folder / "ledger.db")
        one.db.backup(target)
        target.close()
        if one is node:
            pin = f'{{"public_key": "{b64(harbour.central.key.public)}"}}'
            (folder / "central.json").write_text(pin)
        report = verify_folder(folder, REALM)
        assert report.first_fault is None, one.dev
        assert report.entries > 4
