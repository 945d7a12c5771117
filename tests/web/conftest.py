"""A node with a small round, and the person who reads its pages."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.counter import Node
from tests.web.reader import Reader


@pytest.fixture
def node(tmp_path: Path) -> Iterator[Node]:
    """A round of three planned visits, bottles issued, nothing filled."""
    made = Node(tmp_path / "node")
    made.plan(["Q-0401", "Q-0402", "Q-0403"])
    yield made
    made.store.close()


@pytest.fixture
def reader(node: Node) -> Reader:
    """The clerk at this node."""
    return Reader(node)
