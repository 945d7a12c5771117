"""A day over two processes and a line that breaks in the middle of exchanges, three times."""

import contextlib
import sqlite3
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import urlsplit

import pytest

from fieldapp import work
from fieldapp.reading.rounds import read_round
from fieldapp.rehearsal.browser import Browser
from fieldapp.rehearsal.nodes import Process, Time, make_node
from fieldapp.rehearsal.relay import Relay
from fieldapp.rehearsal.script import read_script
from fieldapp.rehearsal.walk import invite_and_enrol, plan_at
from fieldapp.rehearsal.way import Way, begins_at, choose
from fieldapp.running import HandedBack, hand_over
from tests.journeys import walks
from tests.nodes import SAMPLER

IN_THE_REQUEST, IN_THE_ANSWER = ("to_central", 900), ("to_tablet", 60)
PIECES = (["V-0401", "V-0402"], ["V-0404"], ["V-0405", "V-0406"], ["V-0407"])
"""The visits between one exchange and the next; a pair and a blank are among them."""


@dataclass
class Nodes:
    """A central, a tablet, and the line between them."""

    folder: Path
    central: str
    relay: Relay
    way: Way
    browser: Browser

    def walk(self, visits: list[str]) -> None:
        """Walk those visits at the tablet's pages."""
        for visit in visits:
            assert self.way.take(self.way.visit(self.browser, visit)) is None

    def exchange(self) -> dict[str, object]:
        """Send and fetch on the tablet."""
        return hand_over(self.folder / "tablet", "sync", {}, work.quiet)

    def sent(self) -> list[bytes]:
        """Return the hashes of the tablet's own entries, in their order."""
        asked = "SELECT hash FROM entry WHERE log IN (SELECT log FROM own_log) ORDER BY seq"
        return [bytes(row[0]) for row in rows(self.folder / "tablet", asked)]

    def held(self) -> list[bytes]:
        """Return the hashes of the tablet's entries at central, in their order."""
        (log,) = rows(self.folder / "tablet", "SELECT log FROM own_log")[0]
        asked = "SELECT hash FROM entry WHERE log = ? ORDER BY seq"
        return [bytes(row[0]) for row in rows(self.folder / "central", asked, log)]

    def confirmed(self) -> int:
        """Return up to where the tablet knows that central holds its log."""
        found = rows(
            self.folder / "tablet",
            "SELECT a.seq FROM acknowledgement a JOIN own_log o ON o.log = a.log",
        )
        return int(found[0][0]) if found else 0


def rows(folder: Path, asked: str, *given: object) -> list[tuple]:
    """Return rows of a running node's database, read only."""
    uri = f"{(folder / 'ledger.db').as_uri()}?mode=ro"
    with contextlib.closing(sqlite3.connect(uri, uri=True)) as db:
        return db.execute(asked, given).fetchall()


@pytest.fixture
def nodes(tmp_path: Path) -> Iterator[Nodes]:
    plan = walks.only(walks.shipped_plan(), [visit for piece in PIECES for visit in piece])
    file = walks.written(tmp_path, plan)
    planned = read_round(file.read_bytes(), file.name)
    script = read_script(file.read_bytes(), file.name, planned)
    time = Time(planned.round.zone)
    time.begin(begins_at(planned, script))
    central, tablet = tmp_path / "central", tmp_path / "tablet"
    with make_node(central, time) as store:
        codes = plan_at(store, file.name, file.read_bytes(), planned)
    make_node(tablet, time).close()
    with (
        Process("central", central) as desk,
        Relay(urlsplit(desk.url).port or 0) as relay,
        Process("serve", tablet) as kitchen,
    ):
        kitchen.url  # noqa: B018 - it is up before work is handed to it
        invite_and_enrol(central, tablet, relay.url, SAMPLER)
        hand_over(tablet, "sync", {}, work.quiet)
        browser = Browser(kitchen.url)
        choose(browser, SAMPLER)
        yield Nodes(tmp_path, desk.url, relay, Way(planned, script, time, codes), browser)


def test_a_line_cut_three_times_in_exchanges_loses_nothing_and_doubles_nothing(
    nodes: Nodes,
) -> None:
    for piece, (way, length) in zip(
        PIECES, (IN_THE_REQUEST, IN_THE_ANSWER, IN_THE_REQUEST), strict=False
    ):
        nodes.walk(piece)
        before, confirmed = nodes.held(), nodes.confirmed()
        assert nodes.sent()[: len(before)] == before
        nodes.relay.cut_after(length, way)
        with pytest.raises(HandedBack, match="the line failed"):
            nodes.exchange()
        assert not nodes.relay.told().up
        assert nodes.confirmed() == confirmed
        if way == "to_central":
            assert nodes.held() == before, "half a request is no request"
        else:
            assert len(nodes.held()) > len(before), "central took them; the tablet cannot know"
        nodes.relay.restore()
        assert nodes.exchange()["waiting"] == 0
        assert nodes.held() == nodes.sent()
    assert nodes.relay.told().cuts == 3

    nodes.walk(PIECES[-1])
    assert nodes.exchange()["waiting"] == 0
    nodes.way.receive(Browser(nodes.central))
    sent = nodes.sent()
    assert nodes.held() == sent
    assert len(set(sent)) == len(sent)
    assert nodes.confirmed() == len(sent)
    assert_every_bottle_once(nodes)


def assert_every_bottle_once(nodes: Nodes) -> None:
    central = nodes.folder / "central"
    codes = set(nodes.way.codes.values())
    for kind in ("bottle.filled", "bottle.received"):
        asked = "SELECT json_extract(data, '$.bottle') FROM p_fact WHERE kind = ?"
        assert Counter(row[0] for row in rows(central, asked, kind)) == Counter(codes)
    assert rows(central, "SELECT kind FROM p_finding WHERE opens_at = ''") == []
    assert [row[0] for row in rows(central, "SELECT DISTINCT state FROM p_visit")] == ["closed"]
