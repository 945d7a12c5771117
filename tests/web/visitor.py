"""Somebody with a browser before an application: every route with its example, and its token."""

import contextlib
import re
import tempfile
from collections.abc import Iterator
from html import unescape
from pathlib import Path
from typing import Any

from flask import Flask
from werkzeug.routing import Rule
from werkzeug.test import TestResponse

from fieldapp import photos
from fieldapp.domain import facts
from fieldapp.identity import new_act
from fieldapp.store import Store
from fieldapp.web import create_app
from tests import nodes
from tests.nodes import press
from tests.pictures import jpeg, marked

TOKEN = "of-a-command-line"
VISIT = "V-0401"
STRANGER = "00000000000"
"""A right code that no round here issued."""

COOLER = "C-1"


class Visitor:
    """One browser at the application of a node that holds the shipped plan."""

    def __init__(self, store: Store) -> None:
        self.store = store
        with store.transaction():
            store.put("places", "kitchen bench desk")
        self.codes = nodes.issue(store)
        self.finding = self._find()
        press(store, facts.BottlePacked(bottle=self.codes[1], cooler=COOLER, route=nodes.ROUTE))
        self.photo = self._photograph()
        self.app: Flask = create_app(store, token=TOKEN)
        self.client = self.app.test_client()
        self.token = ""
        self.token = re.findall(r'name="token" value="([^"]+)"', self.get("/").text)[0]
        self.send("/person", person=nodes.SAMPLER)

    def _find(self) -> str:
        """Open a visit and receive a bottle that nobody issued; return the finding."""
        self.opened = press(self.store, facts.VisitOpened(visit=VISIT)).entries[0]
        press(self.store, facts.BottleReceived(bottle=STRANGER, outcome="held", reason="no record"))
        with self.store.pages() as pages:
            (found,) = pages.findings(nodes.MORNING)
        return str(found["finding"])

    def _photograph(self) -> str:
        """Keep a picture and note it of the visit; return its hash."""
        kept = photos.keep(jpeg(marked(60, 40)), self.store.folder)
        about = f"visit:{VISIT}"
        taken = facts.PhotoTaken(
            about=about, photo=kept.sha256, n=kept.n, media=kept.media, visit=VISIT
        )
        press(self.store, taken)
        return kept.sha256

    @property
    def static(self) -> str:
        """The name of a file that is served."""
        return "css/base.css"

    def path(self, rule: Rule) -> str:
        """Return a path of that route, filled with what this node holds."""
        known = {
            "visit": VISIT, "route": nodes.ROUTE, "round_id": nodes.ROUND, "bottle": self.codes[0],
            "finding_id": self.finding, "sha256": self.photo, "cooler": COOLER,
            "entry": self.opened,
            "name": self.static, "_what": "session",
        }  # fmt: skip
        if rule.endpoint == "work.hand_in":
            known["name"] = "labels"
        path = rule.rule
        for name in rule.arguments:
            path = re.sub(rf"<(\w+:)?{name}>", known[name], path)
        return path

    def rules(self, method: str) -> list[Rule]:
        """Return every route that answers that method."""
        return [rule for rule in self.app.url_map.iter_rules() if method in (rule.methods or ())]

    def get(self, path: str, **headers: str) -> TestResponse:
        """Open a page."""
        answer = self.client.get(path, headers=headers)
        answer.get_data()  # read to the end, or a served file stays open
        answer.close()
        return answer

    def send(self, path: str, *, headers: dict[str, str] | None = None, **fields: Any):
        """Send a form with its hidden fields; a field given as None is left out."""
        form = {"token": self.token, "act": new_act(), **fields}
        sent = {name: value for name, value in form.items() if value is not None}
        return self.client.post(path, data=sent, headers=headers or {})


@contextlib.contextmanager
def a_visitor(folder: Path) -> Iterator[Visitor]:
    """Give a browser at a new node that holds the shipped plan."""
    with Store.open(folder / "node", nodes.HandClock()) as store:
        nodes.import_shipped(store)
        yield Visitor(store)


def rule_of(visitor: Visitor, endpoint: str, method: str) -> Rule:
    """Return the route of that name."""
    return next(rule for rule in visitor.rules(method) if rule.endpoint == endpoint)


def endpoints(method: str) -> list[str]:
    """Return the names of all routes with that method, from an application of its own."""
    with tempfile.TemporaryDirectory() as folder, Store.open(Path(folder) / "node") as store:
        rules = list(create_app(store).url_map.iter_rules())
    return sorted({rule.endpoint for rule in rules if method in (rule.methods or ())})


def words_of(page: str) -> str:
    """Return the words of a page as a person reads them."""
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", page)).split())
