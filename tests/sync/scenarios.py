"""What may befall devices and central, told as short stories that end with nothing lost.

Each story raises AssertionError when a fact is lost, doubled or falsely shown as received. The
suite runs them against the code as it is, and against planted mutants that must fail.
"""

from sync import ledger

from .harbour import Harbour, Node


def assert_all_there(harbour: Harbour, *nodes: Node) -> None:
    """Let all drain, then look for every fact of every node, its place and its acknowledgement."""
    saved = {fact for node in nodes for fact in node.facts()} | harbour.central.facts()
    harbour.drain(*nodes)
    missing = saved - harbour.central.facts()
    assert not missing, f"{len(missing)} facts never reached central"
    for node in nodes:
        assert_acknowledged(harbour, node)


def assert_acknowledged(harbour: Harbour, node: Node) -> None:
    """What shows as received is held by central at that place, and heads agree."""
    for log in node.own_logs(node.db):
        noted, held = ledger.acknowledged(node.db, log), ledger.head(node.db, log)
        assert noted is not None
        assert held is not None
        assert ledger.hash_at(harbour.central.db, log, noted.seq) == noted.hash
        assert (noted.seq, noted.hash) == (held.seq, held.hash)
    own = "SELECT hash FROM entry WHERE log IN (SELECT log FROM own)"
    for (hash_,) in node.db.execute(own).fetchall():
        assert ledger.received(node.db, hash_)


def device_restored() -> None:
    """A laptop is set back to last week's backup after its facts had arrived."""
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("before the backup")
    copy = node.snapshot()
    node.note("after the backup")
    harbour.sync(node)
    node.restore(copy)
    assert_all_there(harbour, node)
    assert node.texts() == ["after the backup", "before the backup"]


def device_restored_and_used_before_it_syncs() -> None:
    """As above, but the sampler works on before the network comes back."""
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("before the backup")
    copy = node.snapshot()
    node.note("after the backup")
    harbour.sync(node)
    node.restore(copy)
    for n in range(3):
        node.note(f"since {n}")
    assert_all_there(harbour, node)
    assert node.texts() == [
        "after the backup",
        "before the backup",
        "since 0",
        "since 1",
        "since 2",
    ]


def device_restored_to_the_length_it_had() -> None:
    """The restored log is just as long as central's: only the hash tells them apart."""
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    copy = node.snapshot()
    node.note("lost with the disk, held by central")
    harbour.sync(node)
    node.restore(copy)
    node.note("written in its place")
    assert_all_there(harbour, node)


def device_cloned() -> None:
    """One disk image runs on two laptops, and both are used."""
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("before")
    harbour.sync(node)
    twin = node.clone()
    for n in range(4):
        node.note(f"first {n}")
        twin.note(f"second {n}", private={"name": "N"})
    assert_all_there(harbour, node, twin)
    assert len(harbour.central.texts()) == 9


def central_restored() -> None:
    """Central's disk dies; it comes back as it was before the devices' last facts."""
    harbour = Harbour()
    node = harbour.device("D-01")
    node.note("before")
    harbour.sync(node)
    copy = harbour.central.snapshot()
    node.note("after")
    harbour.sync(node)
    harbour.restore_central(copy)
    report = harbour.sync(node)
    assert report.regressed == 1
    assert_all_there(harbour, node)


def central_restored_and_device_restored() -> None:
    """Both lost time, the device more than central."""
    harbour = Harbour()
    node = harbour.device("D-01")
    early = node.snapshot()
    node.note("one")
    harbour.sync(node)
    copy = harbour.central.snapshot()
    node.note("two")
    harbour.sync(node)
    harbour.restore_central(copy)
    node.restore(early)
    node.note("three")
    assert_all_there(harbour, node)
    assert harbour.central.texts() == ["one", "three"]


def central_restored_between_clones() -> None:
    """The canonical branch itself is lost by central after a clone had adopted it."""
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    twin = node.clone()
    copy = harbour.central.snapshot()
    node.note("first")
    harbour.sync(node)
    twin.note("second")
    harbour.sync(twin)
    harbour.restore_central(copy)
    third = twin.clone()
    third.note("third")
    assert_all_there(harbour, twin, third, node)
    assert sorted(set(harbour.central.texts())) == ["first", "second", "third"]


def centrals_own_facts_come_back() -> None:
    """What central itself wrote and lost is given back by the devices that had pulled it."""
    harbour = Harbour()
    node = harbour.device("D-01", "route:1")
    copy = harbour.central.snapshot()
    lost = harbour.central.note("planned on Monday", "route:1", private={"name": "N"})
    harbour.sync(node)
    assert lost in node.facts()
    harbour.restore_central(copy)
    harbour.central.note("planned on Tuesday", "route:1")
    assert_all_there(harbour, node)
    assert harbour.central.texts() == ["planned on Monday", "planned on Tuesday"]
    assert node.texts() == ["planned on Monday", "planned on Tuesday"]
    other = harbour.device("D-02", "route:1")
    harbour.sync(other)
    assert other.texts() == ["planned on Monday", "planned on Tuesday"]


def centrals_own_facts_come_back_twice() -> None:
    """Central falls back again before the device has pulled anew."""
    harbour = Harbour()
    node = harbour.device("D-01", "route:1")
    copy = harbour.central.snapshot()
    harbour.central.note("planned on Monday", "route:1")
    harbour.sync(node)
    for _ in range(3):
        harbour.restore_central(copy)
        harbour.sync(node)
    assert_all_there(harbour, node)
    assert harbour.central.texts() == ["planned on Monday"]


def a_missing_entry_below_the_cursor_comes_back() -> None:
    """Central keeps the entry at the cursor and has lost one before it."""
    harbour = Harbour()
    one, two = harbour.device("D-01", "route:1"), harbour.device("D-02", "route:1")
    copy = harbour.central.snapshot()
    harbour.central.note("planned on Monday", "route:1")
    harbour.sync(one)
    harbour.restore_central(copy)
    harbour.central.note("planned on Tuesday", "route:1")
    harbour.central.note("planned on Wednesday", "route:1")
    harbour.sync(two)
    before_monday_came_back = harbour.central.snapshot()
    harbour.sync(one)
    harbour.sync(two)
    assert len(two.texts()) == 3
    harbour.restore_central(before_monday_came_back)
    assert_all_there(harbour, one, two)
    assert len(harbour.central.texts()) == 3


def carried_twice() -> None:
    """A carried entry is itself lost and carried again: the inner one travels, once."""
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    twin = node.clone()
    node.note("first")
    harbour.sync(node)
    fact = twin.note("second", private={"name": "N"})
    copy = harbour.central.snapshot()
    harbour.sync(twin)
    third = twin.clone()
    harbour.restore_central(copy)
    third.note("third")
    harbour.sync(third)
    twin.note("fourth")
    assert_all_there(harbour, twin, third, node)
    assert sorted(harbour.central.texts()) == ["first", "fourth", "second", "third"]
    assert fact in harbour.central.facts()


def long_history_forks_far_back() -> None:
    """The last common entry lies further back than one exchange holds."""
    harbour = Harbour()
    node = harbour.device("D-01")
    for n in range(20):
        node.note(f"common {n}")
    harbour.sync(node)
    twin = node.clone()
    for n in range(620):
        node.note(f"first {n}")
    for n in range(610):
        twin.note(f"second {n}")
    assert_all_there(harbour, node, twin)
    assert len(harbour.central.texts()) == 1250


def sent_again_after_a_lost_answer() -> None:
    """The answer is lost after central had committed."""
    harbour = Harbour()
    node = harbour.device("D-01")
    harbour.sync(node)
    copy = node.snapshot()
    node.note("fact")
    with_answer = node.clone()
    harbour.sync(with_answer)
    node.restore(copy)
    node.note("other fact")
    assert_all_there(harbour, node)


STORIES = [
    device_restored,
    device_restored_and_used_before_it_syncs,
    device_restored_to_the_length_it_had,
    device_cloned,
    central_restored,
    central_restored_and_device_restored,
    central_restored_between_clones,
    centrals_own_facts_come_back,
    centrals_own_facts_come_back_twice,
    a_missing_entry_below_the_cursor_comes_back,
    carried_twice,
    sent_again_after_a_lost_answer,
]
LONG_STORIES = [long_history_forks_far_back]
