"""kill -9 at any moment loses no answered post; the same count finds a node that answers first."""

import contextlib
import http.client
import random
import sqlite3
import threading
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path

from fieldapp.domain.codes import new_code
from fieldapp.identity import new_act
from fieldapp.store import DATABASE
from sync.entry import Realm
from sync.verify import verify_folder
from tests.store.served import Browser, Served, prepare

SEED = 20270504
KILLS, LEAST_POSTS = 25, 500
MOST_DELAY_S = 0.02
"""From the chosen post to the kill; a post takes less, so kills fall into every part of one."""

CUT_OFF = (OSError, http.client.HTTPException)


@dataclass
class Tally:
    """What came of all lives of one folder's node."""

    acknowledged: dict[str, str] = field(default_factory=dict)  # act: bottle
    doubted: dict[str, str] = field(default_factory=dict)
    lost: set[str] = field(default_factory=set)
    broken: list[str] = field(default_factory=list)
    doubled: set[str] = field(default_factory=set)
    kills: int = 0


def live_and_die(folder: Path, browser: Browser, tally: Tally, dice: random.Random, module: str,
                 posts: tuple[int, int]) -> None:  # fmt: skip
    """Start the node, settle what was in doubt, post until it is killed, then look at the disk."""
    with Served(folder, module) as node:
        browser.reconnect(node.url)
        look_for_losses(folder, tally)
        settle(browser, tally)
        quota, delay = dice.randint(*posts), dice.uniform(0, MOST_DELAY_S)
        with contextlib.suppress(*CUT_OFF):
            for number in range(10_000):
                act, bottle = new_act(), new_code()
                tally.doubted[act] = bottle
                if number == quota:
                    threading.Timer(delay, node.kill).start()
                if post(browser, act, bottle):
                    tally.acknowledged[act] = tally.doubted.pop(act)
    tally.kills += 1
    fault = verify_folder(folder, Realm("tapwitness")).first_fault
    if fault is not None:
        tally.broken.append(f"kill {tally.kills}: {fault}")


def settle(browser: Browser, tally: Tally) -> None:
    """Make each press again whose answer the last crash cut off."""
    for act, bottle in list(tally.doubted.items()):
        assert post(browser, act, bottle), "a press made again after a crash is taken"
        tally.acknowledged[act] = tally.doubted.pop(act)


def post(browser: Browser, act: str, bottle: str) -> bool:
    """Receive a bottle at the counter; say whether the node answered that it is recorded."""
    status, leads_to, page = browser.post("/bench/receive", {"bottle": bottle}, act)
    assert status == 303, page
    return f"bottle={bottle}" in leads_to


def look_for_losses(folder: Path, tally: Tally) -> None:
    """Hold what was answered for against what is on disk, and each press against its entries."""
    found = entries_by_act(folder)
    tally.lost |= {act for act in tally.acknowledged if act not in found}
    tally.doubled |= {act for act, n in found.items() if act in tally.acknowledged and n != 1}


def entries_by_act(folder: Path) -> dict[str, int]:
    """Return how many entries each act has, read past the program."""
    path = (folder / DATABASE).resolve().as_uri() + "?mode=ro"
    with closing(sqlite3.connect(path, uri=True)) as db:
        rows = db.execute(
            "SELECT json_extract(CAST(body AS TEXT), '$.id'), COUNT(*) FROM entry GROUP BY 1"
        )
        return dict(rows.fetchall())


def run(folder: Path, kills: int, module: str, posts: tuple[int, int]) -> Tally:
    """Kill a node so many times and return what came of it."""
    print(f"seed {SEED}")
    prepare(folder)
    with Served(folder) as node:
        browser = Browser(node.url)
    tally, dice = Tally(), random.Random(SEED)
    for _ in range(kills):
        live_and_die(folder, browser, tally, dice, module, posts)
    with Served(folder) as node:
        browser.reconnect(node.url)
        look_for_losses(folder, tally)
        settle(browser, tally)
        look_for_losses(folder, tally)
        node.end()
    browser.close()
    return tally


def test_25_kills_at_random_moments_lose_no_answered_post_and_the_chain_verifies(tmp_path):
    tally = run(tmp_path, KILLS, "fieldapp.cli", posts=(18, 30))
    assert tally.kills == KILLS
    assert len(tally.acknowledged) >= LEAST_POSTS
    assert tally.lost == set()
    assert tally.doubled == set()
    assert tally.broken == []
    fault = verify_folder(tmp_path, Realm("tapwitness")).first_fault
    assert fault is None


def test_the_same_count_finds_a_node_that_answers_before_its_commit(tmp_path):
    tally = run(tmp_path, 5, "tests.store.answers_first", posts=(4, 8))
    assert tally.lost, "a kill between answer and commit must be found"
    assert tally.broken, "the anchor was written ahead of the disk, and verify must say so"
