"""A node's start, from the process to its first page."""

import http.client
import statistics
from contextlib import closing
from pathlib import Path
from urllib.parse import urlsplit

from fieldapp.store import Store
from tests import nodes
from tests.bench.measured import Measured, timed
from tests.store.served import Served

STARTS = 7


def start(folder: Path) -> list[Measured]:
    """Measure from the start of the process to the first page, each by turns with a bare app."""
    with Store.open(folder) as store:
        nodes.import_shipped(store)
    ours, peer = [], []
    for _ in range(STARTS):
        ours.append(_until_first_page(["fieldapp.cli", "serve", "--data", str(folder)]))
        peer.append(_until_first_page(["tests.bench.bare"]))
    return [
        Measured(
            "start to first page, against a bare Flask app",
            statistics.median(ours),
            statistics.median(peer),
            limit=4.0,
        )
    ]


def _until_first_page(command: list[str]) -> float:
    running: list[Served] = []

    def first_page() -> None:
        running.append(Served.of(command))
        with closing(http.client.HTTPConnection(urlsplit(running[0].url).netloc, timeout=20)) as at:
            at.request("GET", "/")
            answer = at.getresponse()
            assert answer.status == 200, answer.status
            answer.read()

    try:
        return timed(first_page)
    finally:
        for node in running:
            node.end()
