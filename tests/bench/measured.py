"""What is measured: a node's start to its first page, and one post in the Kitchen."""

import http.client
import json
import sqlite3
import statistics
import time
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from urllib.parse import urlsplit

from fieldapp.store import Store
from tests import nodes
from tests.store.served import Browser, Served

STARTS = 7
VISITS = 30

Fields = dict[str, str]


@dataclass(frozen=True)
class Measured:
    """One line of the table; times in milliseconds, ``limit`` on the ratio."""

    name: str
    ours_ms: float
    peer_ms: float
    limit: float

    @property
    def ratio(self) -> float:
        """How many times as long as the peer."""
        return self.ours_ms / self.peer_ms


def start(folder: Path) -> Measured:
    """Measure from the start of the process to the first page, each by turns with a bare app."""
    with Store.open(folder) as store:
        nodes.import_shipped(store)
    ours, peer = [], []
    for _ in range(STARTS):
        ours.append(_until_first_page(["fieldapp.cli", "serve", "--data", str(folder)]))
        peer.append(_until_first_page(["tests.bench.bare"]))
    return Measured(
        "start to first page, against a bare Flask app",
        statistics.median(ours),
        statistics.median(peer),
        limit=4.0,
    )


def _until_first_page(command: list[str]) -> float:
    began = time.perf_counter()
    with Served.of(command) as node:
        line = http.client.HTTPConnection(urlsplit(node.url).netloc, timeout=20)
        with closing(line):
            line.request("GET", "/")
            answer = line.getresponse()
            assert answer.status == 200, answer.status
            answer.read()
        took = time.perf_counter() - began
        node.end()
    return took * 1000


def kitchen_post(folder: Path) -> list[Measured]:
    """Measure every post of ordinary first-litre visits, and a commit of the same fields."""
    codes = _plan(folder)
    ours: list[float] = []
    sent: list[Fields] = []
    with Served(folder) as node:
        with closing(Browser(node.url, nodes.SAMPLER)) as browser:
            for visit, code in codes.items():
                for path, fields in _posts(code):
                    ours.append(_timed(lambda p=path, v=visit, f=fields: _post(browser, v, p, f)))
                    sent.append(fields)
        node.end()
    with closing(_bare_database(folder / "bare.db")) as db:
        peer = [_timed(lambda f=fields: _commit(db, f)) for fields in sent]
    return [
        Measured("Kitchen post p50, against a bare SQLite commit", *_at(0.50, ours, peer), 10.0),
        Measured("Kitchen post p95, against a bare SQLite commit", *_at(0.95, ours, peer), 10.0),
    ]


def _at(part: float, *runs: list[float]) -> list[float]:
    return [sorted(run)[min(len(run) - 1, int(len(run) * part))] for run in runs]


def _timed(deed: Callable[[], None]) -> float:
    began = time.perf_counter()
    deed()
    return (time.perf_counter() - began) * 1000


def _posts(code: str) -> Iterator[tuple[str, Fields]]:
    """Return the posts of one ordinary first-litre visit, door to door."""
    used = (datetime.now(UTC) - timedelta(hours=8)).isoformat(timespec="seconds")
    yield "open", {}
    yield "answer", {"question": "consent", "answer": "agreed"}
    yield "last-use", {"exact": "about", "at": used, "where": "bath", "said": "yes"}
    yield "answer", {"question": "tap", "answer": "drinking"}
    yield "answer", {"question": "filter", "answer": "none"}
    yield "answer", {"question": "aerator", "answer": "as-it-is"}
    yield "answer", {"question": "plumbing-work", "answer": "none"}
    yield "set", {"code": code}
    yield "fill", {"fill": "line"}
    yield "sign", {"name": "Wrenna Oddquist", "close": "yes"}


def _post(browser: Browser, visit: str, path: str, fields: Fields) -> None:
    status, leads_to, page = browser.post(f"/kitchen/visits/{visit}/{path}", fields)
    assert (status, leads_to) == (303, f"/kitchen/visits/{visit}"), page


def _plan(folder: Path) -> dict[str, str]:
    """Import a round of so many first-litre visits; return the code of each visit's bottle."""
    read = json.loads(nodes.SHIPPED.read_text("utf-8"))
    site, route = read["sites"][0], read["routes"][0]
    read["sites"] = [{**site, "id": f"Q-{n:04}"} for n in range(VISITS)]
    draws = [{"draw": 1, "purpose": "compliance"}]
    route["visits"] = [
        {"id": f"V-{n:04}", "site": f"Q-{n:04}", "protocol": "first-litre", "draws": draws}
        for n in range(VISITS)
    ]
    del read["rehearsal"]
    file = folder.with_suffix(".json")
    file.write_text(json.dumps(read), "utf-8")
    with Store.open(folder) as store:
        nodes.import_shipped(store, file)
        nodes.issue(store)
        with store.pages() as pages:
            return {b["printed_for"]: b["bottle"] for b in pages.bottles(route=nodes.ROUTE)}


def _bare_database(path: Path) -> sqlite3.Connection:
    """Return a database under the settings of the record, with one table and no rule."""
    db = sqlite3.connect(path, isolation_level=None)
    db.execute("PRAGMA journal_mode = WAL")
    db.execute("PRAGMA synchronous = FULL")
    db.execute("CREATE TABLE post (id INTEGER PRIMARY KEY, at TEXT, fields TEXT) STRICT")
    return db


def _commit(db: sqlite3.Connection, fields: Fields) -> None:
    db.execute("BEGIN IMMEDIATE")
    at = datetime.now(UTC).isoformat()
    db.execute("INSERT INTO post (at, fields) VALUES (?, ?)", (at, json.dumps(fields)))
    db.execute("COMMIT")
