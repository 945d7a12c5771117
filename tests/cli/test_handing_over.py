"""A running node holds its folder: commands hand it their work, and no second writer opens it."""

import base64
import json
import sqlite3
import stat
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib import error, request

import pytest

import fieldapp.store.disk
from fieldapp.running import RUNNING, HandedBack, hand_over, read_running
from fieldapp.store import Store
from sync.errors import FolderHeld
from sync.folder import FolderLock
from tests import nodes
from tests.cli import at_work
from tests.cli.at_work import command, fails
from tests.cli.conftest import Counter


@pytest.fixture
def opened(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Give the list of databases that the store of this process opened."""
    found: list[str] = []
    connect = sqlite3.connect

    class Watched:
        """The library as the store sees it, with its openings written down."""

        def __getattr__(self, name: str) -> Any:
            return getattr(sqlite3, name)

        @staticmethod
        def connect(database: Any, *given: Any, **more: Any) -> sqlite3.Connection:
            found.append(str(database))
            return connect(database, *given, **more)

    monkeypatch.setattr(fieldapp.store.disk, "sqlite3", Watched())
    return found


@pytest.fixture(scope="module")
def held(worked: Counter, tmp_path_factory: pytest.TempPathFactory) -> Iterator[at_work.Node]:
    """Give a running central of a day of two visits."""
    folder = at_work.copied(worked.folder, tmp_path_factory.mktemp("held") / "central")
    with at_work.running("central", folder) as node:
        yield node


# while it runs


def test_running_json_tells_port_and_token_to_its_owner_alone(held: at_work.Node) -> None:
    mode = stat.S_IMODE((held.folder / RUNNING).stat().st_mode)
    assert mode == 0o600
    said = held.running
    assert held.url == f"http://127.0.0.1:{said['port']}"
    assert len(said["token"]) >= 43, "32 random bytes"
    assert said["pid"] == held.process.pid


def test_its_folder_is_locked_and_a_second_node_is_refused_in_a_sentence(
    held: at_work.Node, opened: list[str]
) -> None:
    with pytest.raises(FolderHeld):
        FolderLock(held.folder).acquire()
    fails(command("serve", "--data", held.folder), str(held.folder))
    fails(command("rebuild", "--data", held.folder), str(held.folder))
    assert opened == []
    assert held.running["pid"] == held.process.pid, "the refused one left running.json alone"


def test_a_round_is_imported_by_the_running_node(held: at_work.Node, opened: list[str]) -> None:
    done = command("round", "import", nodes.SHIPPED, "--data", held.folder)
    assert done.exit_code == 0
    assert "changes nothing" in done.stdout
    assert opened == []


def test_labels_are_issued_by_the_running_node_and_written_here(
    held: at_work.Node, opened: list[str], tmp_path: Path
) -> None:
    target = tmp_path / "labels.pdf"
    before = at_work.count(held.folder)
    done = command("labels", nodes.ROUTE, "-o", target, "--data", held.folder, "--json")
    answer = json.loads(done.stdout)
    assert (done.exit_code, answer["issued"]) == (0, 0)
    assert sorted(at_work.qr_codes(target.read_bytes())) == sorted(answer["codes"])
    assert at_work.count(held.folder) == before + 1, "the reprint"
    assert opened == []


def test_results_are_imported_by_the_running_node_and_stand_on_its_pages(
    held: at_work.Node, worked: Counter, opened: list[str], tmp_path: Path
) -> None:
    file = at_work.results(tmp_path, f"{worked.received},{worked.number},lead,41.5,ug/L")
    done = command("results", "import", file, "--data", held.folder)
    assert done.exit_code == 0
    assert done.stdout.startswith("1 rows for 1 bottles")
    assert opened == []
    page = got(f"{held.url}/desk/bottles/{worked.received}")
    assert "41.5" in page


def test_an_invitation_an_enrolment_and_a_fetch_are_handed_over(
    held: at_work.Node, opened: list[str], tmp_path: Path
) -> None:
    code = at_work.invited(held.folder)
    assert opened == []
    with at_work.running("serve", tmp_path / "tablet") as tablet:
        done = command("enrol", held.url, code, "--data", tablet.folder)
        assert done.exit_code == 0, done.stderr
        fetched = command("sync", "--data", tablet.folder, "--json")
        assert json.loads(fetched.stdout)["pulled"] > 30
        assert opened == []


def test_faults_come_back_as_the_same_lines_and_exit_1(
    held: at_work.Node, worked: Counter, opened: list[str], tmp_path: Path
) -> None:
    file = at_work.results(tmp_path, f"{worked.received},,lead,plenty,ug/L", "F8QY,,lead,1,ug/L")
    there = command("results", "import", file, "--data", held.folder)
    assert opened == []
    quiet = at_work.copied(worked.folder, tmp_path / "quiet")
    here = command("results", "import", file, "--data", quiet)
    assert (there.exit_code, there.stdout) == (here.exit_code, here.stdout) == (1, "")
    assert there.stderr == here.stderr
    assert len(there.stderr.splitlines()) == 2


def test_progress_of_the_running_node_is_shown_to_the_one_who_asked(held: at_work.Node) -> None:
    seen: list[tuple[str, int, int]] = []
    data = {"route": nodes.ROUTE}
    hand_over(held.folder, "labels", data, lambda *step: seen.append(step))
    assert seen[-1] == ("labels", 11, 11)
    assert [done for _, done, _ in seen] == sorted(done for _, done, _ in seen)


def test_reading_commands_read_beside_the_running_node(
    held: at_work.Node, opened: list[str]
) -> None:
    done = command("verify", "--data", held.folder, "--json")
    assert (done.exit_code, json.loads(done.stdout)["chain"]) == (0, "intact")
    assert opened == []


@pytest.mark.parametrize("token", ["", "Bearer ", "Bearer wrong", "Basic d3Jvbmc="])
def test_work_without_the_token_is_refused_and_not_done(held: at_work.Node, token: str) -> None:
    before = at_work.count(held.folder)
    assert posted(f"{held.url}/work/labels", {"route": nodes.ROUTE}, token) == 403
    assert at_work.count(held.folder) == before


def test_with_the_token_work_that_nobody_knows_is_not_found(held: at_work.Node) -> None:
    token = f"Bearer {held.running['token']}"
    assert posted(f"{held.url}/work/erase", {}, token) == 404
    assert posted(f"{held.url}/work/labels", {"route": nodes.ROUTE}, token) == 200


# when it stopped, or says nothing


def test_running_json_is_gone_when_the_node_ended(desk: Path) -> None:
    with at_work.running("serve", desk):
        assert read_running(desk) is not None
    assert not (desk / RUNNING).exists()
    assert not (desk / "ledger.db-wal").exists()


def test_after_a_kill_the_command_takes_the_lock_itself(desk: Path, opened: list[str]) -> None:
    with at_work.running("serve", desk) as node:
        node.kill()
    assert read_running(desk) is not None, "nobody was there to take it away"
    done = command("round", "import", nodes.SHIPPED, "--data", desk)
    assert done.exit_code == 0
    assert "changes nothing" in done.stdout
    assert opened
    with at_work.running("serve", desk) as again:
        assert again.running["pid"] == again.process.pid


@pytest.mark.parametrize("said", ["", "{}", "[]", "7", '{"port": "door", "token": "x"}', "\xff"])
def test_a_held_folder_that_does_not_say_where_its_node_answers_is_a_sentence(
    said: str, desk: Path, opened: list[str]
) -> None:
    (desk / RUNNING).write_text(said, "latin-1")
    with FolderLock(desk):
        fails(command("sync", "--data", desk), str(desk))
    assert opened == []


def test_a_held_folder_whose_node_does_not_answer_is_a_sentence(desk: Path) -> None:
    said = {"port": at_work.free_port(), "token": "x"}
    (desk / RUNNING).write_text(json.dumps(said), "ascii")
    with FolderLock(desk):
        fails(command("sync", "--data", desk), "does not answer")


def test_a_node_that_refuses_the_token_is_a_sentence(desk: Path) -> None:
    with at_work.running("serve", desk) as node:
        said = {**node.running, "token": "another"}
        (desk / RUNNING).write_text(json.dumps(said), "ascii")
        fails(command("round", "import", nodes.SHIPPED, "--data", desk), "403")


def test_a_node_killed_as_it_begins_an_import_leaves_all_or_nothing(
    tmp_path: Path,
) -> None:
    folder, file = tmp_path / "desk", large_round(tmp_path)
    with at_work.running("serve", folder) as node:
        answered = was_answered(folder, file, lambda *_: node.kill())
    hold_all_or_nothing(folder, file, answered=answered)


def test_a_node_killed_as_it_writes_an_import_leaves_all_or_nothing(tmp_path: Path) -> None:
    """Killed once its write-ahead log grows; what was answered for is there whole."""
    folder, file = tmp_path / "desk", large_round(tmp_path)
    with at_work.running("serve", folder) as node:
        killing = threading.Thread(target=kill_when_written, args=(node,), daemon=True)
        killing.start()
        answered = was_answered(folder, file, lambda *_: None)
        killing.join(60)
    hold_all_or_nothing(folder, file, answered=answered)


def was_answered(folder: Path, file: Path, progress: Callable[..., object]) -> bool:
    """Hand the import over; say whether an answer came before the node was gone."""
    try:
        hand_over(folder, "round-import", asked(file), progress)
    except HandedBack as fault:
        said = fault
    else:
        return True
    assert said.known
    assert str(said).endswith("un the command again.")
    return False


def hold_all_or_nothing(folder: Path, file: Path, *, answered: bool) -> None:
    """Hold that the round is there whole or not at all, and that the file comes in again."""
    assert command("verify", "--data", folder).exit_code == 0
    with Store.open(folder) as store, store.pages() as pages:
        rounds, visits = len(pages.rounds()), pages.count("SELECT COUNT(*) FROM p_visit")
    assert (rounds, visits) in ({(1, LARGE)} if answered else {(0, 0), (1, LARGE)})
    again = command("round", "import", file, "--data", folder, "--json")
    assert (again.exit_code, json.loads(again.stdout)["known"]) == (0, rounds == 1)
    with Store.open(folder) as store, store.pages() as pages:
        assert pages.count("SELECT COUNT(*) FROM p_visit") == LARGE


LARGE = 150


def kill_when_written(node: at_work.Node) -> None:
    """Kill the node as soon as its write-ahead log is larger than at the start."""
    log = node.folder / "ledger.db-wal"
    before = log.stat().st_size
    while node.process.poll() is None and log.stat().st_size <= before:
        pass
    node.kill()


def asked(file: Path) -> dict[str, Any]:
    """Return what the import command hands over."""
    data = base64.b64encode(file.read_bytes()).decode()
    return {"file": file.name, "data": data, "amend": False}


def large_round(folder: Path) -> Path:
    """Write a round of many visits, so that its import takes a while."""
    plan = json.loads(nodes.SHIPPED.read_text("utf-8"))
    plan.pop("rehearsal")
    site, visit = plan["sites"][0], plan["routes"][0]["visits"][0]
    names = [f"Q-{n:04}" for n in range(LARGE)]
    plan["sites"] = [{**site, "id": name} for name in names]
    plan["routes"][0]["visits"] = [
        {**visit, "id": f"V-{n:04}", "site": name} for n, name in enumerate(names)
    ]
    file = folder / "large.json"
    file.write_text(json.dumps(plan), "utf-8")
    return file


def got(url: str) -> str:
    """Return a page."""
    with plain().open(url, timeout=20) as answer:
        return str(answer.read().decode())


def posted(url: str, body: dict[str, Any], token: str) -> int:
    """Return the code of the answer to a piece of work."""
    headers = {"Content-Type": "application/json", **({"Authorization": token} if token else {})}
    post = request.Request(url, data=json.dumps(body).encode(), headers=headers)
    try:
        with plain().open(post, timeout=30) as answer:
            answer.read()
            return int(answer.status)
    except error.HTTPError as fault:
        with fault:
            return int(fault.code)


def plain() -> request.OpenerDirector:
    """Return an opener that asks no proxy."""
    return request.build_opener(request.ProxyHandler({}))
