"""One press in the Kitchen, against a bare post and against a bare commit of the same fields."""

import http.client
import json
from collections.abc import Callable, Iterator
from contextlib import ExitStack, closing
from datetime import UTC, datetime, timedelta
from pathlib import Path
from urllib.parse import urlencode, urlsplit

from fieldapp.store import Store
from tests import nodes
from tests.bench.bare import commit, open_database
from tests.bench.measured import Measured, timed
from tests.store.served import Browser, Served

VISITS = 30

# Both peers only keep the fields. A post in the Kitchen also reads what was recorded, decides,
# signs, tells the page tables and reads them again: as much again as HTTP and disk, a few times.
FLASK_LIMIT = 5.0
# A bare Flask post is about four bare commits (the rows show both), and five of those are allowed.
COMMIT_LIMIT = 20.0

Fields = dict[str, str]
Post = Callable[[str, Fields], None]


def kitchen_post(folder: Path) -> list[Measured]:
    """Measure every post of ordinary first-litre visits, each by turns with both its peers."""
    codes = _plan(folder)
    with ExitStack() as held:
        node = held.enter_context(Served(folder))
        plain = held.enter_context(Served.of(["tests.bench.bare", str(folder / "posts.db")]))
        browser = held.enter_context(closing(Browser(node.url, nodes.SAMPLER)))
        line = http.client.HTTPConnection(urlsplit(plain.url).netloc, timeout=20)
        held.enter_context(closing(line))
        db = held.enter_context(closing(open_database(folder / "commits.db")))
        ours: list[float] = []
        plainly: list[float] = []
        commits: list[float] = []
        for visit, code in codes.items():
            # By turns a visit long: a drift of the machine meets all three, and none of them
            # waits for what another's last post left to the disk.
            sent = list(_posts(code))
            ours += [timed(lambda p=p, f=f, v=visit: _post(browser, v, p, f)) for p, f in sent]
            plainly += [timed(lambda f=f: _post_plainly(line, f)) for _, f in sent]
            commits += [timed(lambda f=f: commit(db, f)) for _, f in sent]
    return [
        *_against("bare Flask post", ours, plainly, FLASK_LIMIT),
        *_against("bare INSERT + COMMIT", ours, commits, COMMIT_LIMIT),
    ]


def _against(peer: str, ours: list[float], theirs: list[float], limit: float) -> list[Measured]:
    return [
        Measured(
            f"Kitchen post {name}, against a {peer}", _at(part, ours), _at(part, theirs), limit
        )
        for name, part in (("p50", 0.50), ("p95", 0.95))
    ]


def _at(part: float, run: list[float]) -> float:
    return sorted(run)[min(len(run) - 1, int(len(run) * part))]


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


def _post_plainly(line: http.client.HTTPConnection, fields: Fields) -> None:
    form = {"Content-Type": "application/x-www-form-urlencoded"}
    line.request("POST", "/post", urlencode(fields), form)
    with line.getresponse() as answer:
        assert answer.status == 303, answer.status
        answer.read()


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
