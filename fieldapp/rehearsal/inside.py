"""Nodes inside this process: their real pages and their real exchange, without a socket between.

The demo walks the year before this way, because no one looks at it while it happens.
"""

from pathlib import Path
from types import TracebackType
from urllib import parse

from fieldapp import identity, work
from fieldapp.rehearsal.browser import Browser, Page, Trouble, read_page
from fieldapp.rehearsal.nodes import Time, make_node
from fieldapp.store import Store
from fieldapp.web import create_app
from fieldapp.work.devices import take_invite
from sync import exchange
from sync.endpoint import Endpoint
from sync.peer import LoopbackPeer


class InsideBrowser(Browser):
    """A person's browser at a node of this process: the same pages, asked without HTTP."""

    def __init__(self, store: Store) -> None:
        super().__init__("http://127.0.0.1")
        self._client = create_app(store).test_client()

    def _ask(self, url: str, data: bytes | None, kind: str = "") -> Page:
        parts = parse.urlsplit(url)
        with self._client.open(
            parts.path,
            query_string=parts.query,
            base_url=self.root,
            method="GET" if data is None else "POST",
            data=data,
            content_type=kind or None,
            follow_redirects=True,
        ) as answer:
            return read_page(answer.request.url, answer.status_code, answer.text)


class InsideTablet:
    """A tablet of this process, enrolled for a person at a central of this process."""

    def __init__(self, folder: Path, time: Time, central: Store, person: str) -> None:
        self.central, self.store = central, make_node(folder, time)
        self._line = LoopbackPeer(Endpoint(central.replica()), central.realm)
        self._enrol(person)

    def exchange(self) -> None:
        """Send and fetch until nothing is left either way."""
        report = exchange.run(self.store.replica(), self._line)
        if report.refused or report.waiting:
            raise Trouble(f"The exchange inside left {report.waiting} waiting: {report.refused}")

    def _enrol(self, person: str) -> None:
        central, tablet = self.central, self.store
        code = work.do(central, "invite", {"person": person}, work.quiet)["code"]
        central.enrolling = lambda dev, key, code: take_invite(central, dev, key, code)
        plain = code.replace("-", "")
        answer = exchange.enrol(self._line, tablet.realm, tablet.key, tablet.dev, plain)
        identity.pin_central(tablet.folder, {
            "url": "loopback:", "dev": central.dev, "public_key": answer["public_key"],
        })  # fmt: skip
        with tablet.transaction():
            tablet.put("places", " ".join(answer["places"]))
            tablet.put("person", person)

    def __enter__(self) -> "InsideTablet":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.store.close()
