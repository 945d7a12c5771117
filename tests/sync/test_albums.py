"""Random histories of photos: cut lines, restored and cloned devices, a central that lost files."""

import hashlib
import shutil
import tempfile
from contextlib import suppress
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule

from sync.errors import NoContact
from sync.shelf import Shelf

from .harbour import REALM, Harbour, Node
from .peers import FAULTS, FaultyPeer

MOST_NODES = 3
PIECE = 64
"""Bytes of a piece here, so that small pictures go in several."""

nodes = st.integers(0, MOST_NODES - 1)
faults = st.lists(st.sampled_from([None, *FAULTS]), max_size=12)


class Albums(RuleBasedStateMachine):
    """One central, two devices and a clone; each keeps its photos in a folder of its own."""

    def __init__(self) -> None:
        super().__init__()
        self.patch = pytest.MonkeyPatch()
        self.patch.setattr("sync.upload.MOST_PIECE_BYTES", PIECE)
        self.folder = Path(tempfile.mkdtemp())
        self.harbour = Harbour()
        self.harbour.central.shelf = Shelf(self.folder / "central")
        self.nodes = [self.harbour.device(f"D-0{n}", seed=n) for n in (1, 2)]
        for number, node in enumerate(self.nodes):
            node.shelf = Shelf(self.folder / str(number))
        self.copies: list[list[bytes]] = [[], []]
        self.central_copies: list[bytes] = []
        self.taken: set[str] = set()

    def node(self, n: int) -> Node:
        return self.nodes[n % len(self.nodes)]

    @rule(n=nodes, picture=st.integers(0, 9), size=st.sampled_from([1, PIECE, 5 * PIECE + 3]))
    def photograph(self, n: int, picture: int, size: int) -> None:
        data = (hashlib.sha256(bytes([picture])).digest() * (size // 32 + 1))[:size]
        self.taken.add(self.node(n).photograph(data))

    @rule(n=nodes, happens=faults)
    def sync(self, n: int, happens: list[str | None]) -> None:
        peer = FaultyPeer(lambda: self.harbour.endpoint, REALM, iter(happens))
        with suppress(NoContact):
            report = self.harbour.sync(self.node(n), peer)
            assert report.refused == []
            assert report.photos_waiting == 0 or peer.happened or len(self.nodes) > 2

    @rule(n=nodes)
    def back_up(self, n: int) -> None:
        self.copies[n % len(self.nodes)].append(self.node(n).snapshot())

    @rule(n=nodes, which=st.integers(0, 9))
    def restore(self, n: int, which: int) -> None:
        if copies := self.copies[n % len(self.nodes)]:
            self.node(n).restore(copies[which % len(copies)])

    @precondition(lambda self: len(self.nodes) < MOST_NODES)
    @rule(n=nodes)
    def clone(self, n: int) -> None:
        twin = self.node(n).clone()
        twin.shelf = Shelf(self.folder / str(len(self.nodes)))
        with suppress(FileNotFoundError):
            shutil.copytree(self.node(n).shelf.folder, twin.shelf.folder)
        self.nodes.append(twin)
        self.copies.append([])

    @rule()
    def back_up_central(self) -> None:
        self.central_copies.append(self.harbour.central.snapshot())

    @precondition(lambda self: self.central_copies)
    @rule(which=st.integers(0, 9))
    def restore_central(self, which: int) -> None:
        self.harbour.restore_central(self.central_copies[which % len(self.central_copies)])

    @rule(which=st.integers(0, 9))
    def central_loses_a_file(self, which: int) -> None:
        shelf = self.harbour.central.shelf
        if names := list(shelf.names()):
            shelf.path(names[which % len(names)]).unlink()

    @invariant()
    def what_central_holds_is_whole(self) -> None:
        shelf = self.harbour.central.shelf
        assert all(shelf.sound(name) for name in shelf.names())

    def teardown(self) -> None:
        try:
            for _ in range(2):
                self.harbour.drain(*self.nodes)
            held = set(self.harbour.central.shelf.names())
            for node in self.nodes:
                named = {h for (h,) in node.db.execute("SELECT DISTINCT h FROM blob")}
                here = {name for name in named if node.shelf.has(name)}
                assert here <= held, "a photo that a device holds and names is not at central"
                report = self.harbour.sync(node)
                assert report.photos_waiting == len(named - held)
        finally:
            for node in (*self.nodes, self.harbour.central):
                node.close()
            shutil.rmtree(self.folder)
            self.patch.undo()


TestAlbums = Albums.TestCase
TestAlbums.settings = settings(
    max_examples=40,
    stateful_step_count=25,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
