"""Nodes that the tests of the command line share."""

from dataclasses import dataclass
from pathlib import Path

import pytest

from tests import nodes
from tests.cli import at_work


@dataclass(frozen=True)
class Counter:
    """A central of one bottle received and one only filled; their codes and the number."""

    folder: Path
    received: str
    filled: str
    number: str


@pytest.fixture(scope="session")
def worked(tmp_path_factory: pytest.TempPathFactory) -> Counter:
    """Give the central of a day of two visits, closed; tests copy it."""
    folder = tmp_path_factory.mktemp("worked")
    pair = nodes.make_pair(folder)
    for visit in ("V-0401", "V-0405"):
        nodes.walk(pair, visit)
    pair.exchange()
    pair.clock.wait(hours=2)
    with pair.central.pages() as pages:
        codes = {b["visit"]: str(b["bottle"]) for b in pages.bottles() if b["filled"]}
    nodes.receive(pair, codes["V-0401"], "W27-0001")
    pair.close()
    return Counter(folder / "central", codes["V-0401"], codes["V-0405"], "W27-0001")


@pytest.fixture
def counter(worked: Counter, tmp_path: Path) -> Counter:
    """Give a copy of that central to this test alone."""
    folder = at_work.copied(worked.folder, tmp_path / "central")
    return Counter(folder, worked.received, worked.filled, worked.number)


@pytest.fixture(scope="session")
def planned_desk(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give the folder of a node that imported the shipped round by command, closed."""
    folder = tmp_path_factory.mktemp("planned") / "desk"
    done = at_work.command("round", "import", nodes.SHIPPED, "--data", folder)
    assert done.exit_code == 0, done.stderr
    return folder


@pytest.fixture
def desk(planned_desk: Path, tmp_path: Path) -> Path:
    """Give a copy of that node to this test alone."""
    return at_work.copied(planned_desk, tmp_path / "desk")


@pytest.fixture(autouse=True)
def no_waiting_for_a_start(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let a command give up at once on a folder whose holder does not answer."""
    monkeypatch.setattr("fieldapp.running.STARTING_S", 0.0)
