"""Nodes that many tests stand on; the helpers themselves are in ``tests/nodes.py``."""

import pytest

from fieldapp.store import Store
from tests import nodes


@pytest.fixture
def clock():
    """Give a clock set by hand, in the morning of the shipped round."""
    return nodes.HandClock()


@pytest.fixture
def store(tmp_path, clock):
    """Give an open, empty node."""
    with Store.open(tmp_path / "node", clock) as opened:
        yield opened


@pytest.fixture
def planned(store):
    """Give a node that imported the shipped round and issued its labels and two spares."""
    nodes.import_shipped(store)
    nodes.issue(store, spare=2)
    return store


@pytest.fixture
def codes(planned):
    """Give the codes on the labels of the shipped route, in the order of the visits."""
    return nodes.issue(planned, spare=2)


@pytest.fixture
def pair(tmp_path):
    """Give a central with the shipped plan and the sampler's tablet, enrolled at it."""
    made = nodes.make_pair(tmp_path)
    yield made
    made.close()
