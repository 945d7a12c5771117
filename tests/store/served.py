"""A node in a process of its own and a browser that posts to it, for tests that kill and count."""

import http.client
import os
import re
import signal
import subprocess
import sys
from pathlib import Path
from urllib.parse import urlencode, urlsplit

from fieldapp.identity import new_act
from fieldapp.store import Store
from tests import nodes

CHECKOUT = Path(__file__).resolve().parents[2]


class Served:
    """A folder's node, run as a person runs it."""

    def __init__(self, folder: Path, module: str = "fieldapp.cli") -> None:
        self._start([module, "serve", "--data", str(folder)])

    @classmethod
    def of(cls, command: list[str]) -> "Served":
        """Return what another module serves, started with those words."""
        made = cls.__new__(cls)
        made._start(command)
        return made

    def _start(self, command: list[str]) -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", *command],
            stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL,
            env={**os.environ, "PYTHONPATH": str(CHECKOUT)}, text=True,
        )  # fmt: skip
        assert self.process.stdout is not None
        self.url = self.process.stdout.readline().strip()
        assert self.url.startswith("http"), "the node did not start"

    def kill(self) -> None:
        """Take the process away in the middle of whatever it does."""
        self.process.send_signal(signal.SIGKILL)

    def __enter__(self) -> "Served":
        return self

    def __exit__(self, *_: object) -> None:
        if self.process.poll() is None:
            self.kill()
        self.gone()

    def gone(self) -> None:
        """Wait until the process is gone."""
        self.process.wait(20)
        if self.process.stdout is not None:
            self.process.stdout.close()

    def end(self) -> None:
        """Ask the process to end and wait until it has."""
        self.process.terminate()
        self.gone()


class Browser:
    """One kept-alive connection with the cookie and the form token of its first page."""

    def __init__(self, url: str, person: str = nodes.CLERK) -> None:
        self.host = urlsplit(url).netloc
        self.line = http.client.HTTPConnection(self.host, timeout=20)
        self.cookie = ""
        self.token = re.findall(r'name="token" value="([^"]+)"', self.get("/"))[0]
        self.post("/person", {"person": person})

    def get(self, path: str) -> str:
        """Return a page."""
        return self.ask("GET", path)[2]

    def post(self, path: str, fields: dict[str, str], act: str = "") -> tuple[int, str, str]:
        """Post a form; return status, where it leads and the page."""
        form = {"act": act or new_act(), "token": self.token, **fields}
        return self.ask("POST", path, urlencode(form))

    def ask(self, method: str, path: str, body: str | None = None) -> tuple[int, str, str]:
        """Carry one request over the kept connection."""
        headers = {"Cookie": self.cookie, "Content-Type": "application/x-www-form-urlencoded"}
        try:
            self.line.request(method, path, body, headers)
            with self.line.getresponse() as answer:
                text = answer.read().decode()
        except (OSError, http.client.HTTPException):
            self.line.close()
            raise
        if given := answer.headers.get("Set-Cookie"):
            self.cookie = given.partition(";")[0]
        return answer.status, answer.headers.get("Location", ""), text

    def close(self) -> None:
        """Let the connection go."""
        self.line.close()

    def reconnect(self, url: str) -> None:
        """Connect anew, after the node was away; the cookie still counts."""
        self.line.close()
        self.host = urlsplit(url).netloc
        self.line = http.client.HTTPConnection(self.host, timeout=20)


def prepare(folder: Path) -> None:
    """Make a node that holds the shipped plan and its labels."""
    with Store.open(folder) as store:
        nodes.import_shipped(store)
        nodes.issue(store)
