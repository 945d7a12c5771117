"""Random histories of a small fleet: whatever happens in any order, nothing saved is lost."""

from contextlib import suppress

from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule

from sync import ledger
from sync.encoding import b64
from sync.errors import NoContact

from .harbour import REALM, Harbour, Node
from .peers import FAULTS, FaultyPeer

MOST_NODES = 4
nodes = st.integers(0, MOST_NODES - 1)
faults = st.lists(st.sampled_from([None, *FAULTS]), max_size=6)


class Fleet(RuleBasedStateMachine):
    """One central and up to four machines of two devices; two of them may be clones."""

    def __init__(self) -> None:
        super().__init__()
        self.harbour = Harbour()
        self.nodes = [self.harbour.device(f"D-0{n}", "route:1", seed=n) for n in (1, 2)]
        self.copies: list[list[bytes]] = [[], []]
        self.central_copies: list[bytes] = []
        self.count = 0

    def node(self, n: int) -> Node:
        return self.nodes[n % len(self.nodes)]

    @rule(n=nodes, scope=st.sampled_from(["", "route:1", "all"]), private=st.booleans())
    def save(self, n: int, scope: str, private: bool) -> None:
        self.count += 1
        hidden = {"name": f"N{self.count}"} if private else None
        self.node(n).note(f"fact {self.count}", *filter(None, [scope]), private=hidden)

    @rule(n=nodes, happens=faults)
    def sync(self, n: int, happens: list[str | None]) -> None:
        node = self.node(n)
        before = self.harbour.central.bytes_held()
        peer = FaultyPeer(lambda: self.harbour.endpoint, REALM, iter(happens))
        with suppress(NoContact):
            report = self.harbour.sync(node, peer)
            assert report.waiting == 0
            assert report.refused == []
            assert node.facts() <= self.harbour.central.facts()
        assert before <= self.harbour.central.bytes_held(), "central dropped something"

    @rule(n=nodes)
    def back_up(self, n: int) -> None:
        self.copies[n % len(self.nodes)].append(self.node(n).snapshot())

    @rule(n=nodes, which=st.integers(0, 9))
    def restore(self, n: int, which: int) -> None:
        copies = self.copies[n % len(self.nodes)]
        if copies:
            self.node(n).restore(copies[which % len(copies)])

    @precondition(lambda self: len(self.nodes) < MOST_NODES)
    @rule(n=nodes)
    def clone(self, n: int) -> None:
        self.nodes.append(self.node(n).clone())
        self.copies.append([])

    @rule()
    def back_up_central(self) -> None:
        self.central_copies.append(self.harbour.central.snapshot())

    @precondition(lambda self: self.central_copies)
    @rule(which=st.integers(0, 9))
    def restore_central(self, which: int) -> None:
        self.harbour.restore_central(self.central_copies[which % len(self.central_copies)])

    @rule(scope=st.sampled_from(["all", "route:1"]))
    def save_at_central(self, scope: str) -> None:
        self.count += 1
        self.harbour.central.note(f"central {self.count}", scope)

    @invariant()
    def chains_hold_together(self) -> None:
        for node in (*self.nodes, self.harbour.central):
            for log in ledger.logs(node.db):
                prev = b""
                for number, entry in enumerate(ledger.read(node.db, log, 1, 1000), 1):
                    assert entry.seq == number
                    assert entry.fields()["prev"] == b64(prev)
                    prev = entry.hash

    def teardown(self) -> None:
        alive = set(self.harbour.central.facts())
        for node in self.nodes:
            alive |= node.facts()
        self.harbour.drain(*self.nodes)
        self.harbour.drain(*self.nodes)
        lost = alive - self.harbour.central.facts()
        assert not lost, f"{len(lost)} saved facts are nowhere at central"
        shared = {
            entry.hash
            for scope in ("all", "route:1")
            for entry in ledger.scoped(self.harbour.central.db, scope, {}, 10_000)
            if entry.fields()["kind"] == "note.made"
        }
        for node in self.nodes:
            assert shared <= node.facts(), "a device does not have what its scopes hold"
        for one in (*self.nodes, self.harbour.central):
            rows = one.db.execute("SELECT COUNT(*) FROM unfollowed").fetchone()
            assert rows == (0,), "an entry was followed twice"
            one.close()


TestFleet = Fleet.TestCase
TestFleet.settings = settings(
    max_examples=60,
    stateful_step_count=30,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
