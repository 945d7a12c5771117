"""``tapwitness verify``: reads everything, changes nothing, names what does not hold."""

import hashlib
import json
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import pytest
from click.testing import CliRunner

from fieldapp import cli
from fieldapp.domain import facts
from fieldapp.store import DATABASE, Store
from sync import ledger
from sync.errors import BadEntry
from tests import nodes
from tests.nodes import ROUTE, count, press

VISIT = "V-0401"


def listing(folder: Path) -> dict[str, str]:
    """Return every file under a folder with the hash of its bytes."""
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def run_verify(folder: Path) -> tuple[int, str, dict[str, object]]:
    """Return exit code, standard error and the JSON of ``tapwitness verify``."""
    ran = CliRunner().invoke(cli.main, ["verify", "--data", str(folder), "--json"])
    return ran.exit_code, ran.stderr, json.loads(ran.stdout)


@pytest.fixture
def folder(tmp_path, clock):
    """Give the folder of a closed node that holds the shipped plan and its labels."""
    with Store.open(tmp_path / "node", clock) as store:
        nodes.import_shipped(store)
        nodes.issue(store)
    return tmp_path / "node"


def test_verify_changes_no_byte_of_a_closed_node(folder):
    before = listing(folder)
    code, said, report = run_verify(folder)
    assert (code, said, report["chain"], report["first_fault"]) == (0, "", "intact", None)
    assert report["entries"] > 30
    assert listing(folder) == before


def test_verify_changes_no_byte_of_a_running_node(planned):
    press(planned, facts.VisitOpened(visit=VISIT))
    before = listing(planned.folder)
    code, _, report = run_verify(planned.folder)
    assert (code, report["entries"]) == (0, count(planned))
    after = listing(planned.folder)
    # a reader's mark in shared memory is no byte of the record
    after.pop("ledger.db-shm"), before.pop("ledger.db-shm")
    assert after == before


def test_verify_needs_nothing_but_the_folder(folder, tmp_path):
    ran = subprocess.run(
        [sys.executable, "-m", "fieldapp.cli", "verify", "--data", str(folder)],
        capture_output=True, text=True, timeout=60, check=False, cwd=tmp_path,
        env={"PATH": "", "HOME": str(tmp_path / "nobody"), "PYTHONPATH": _source()},
    )  # fmt: skip
    assert (ran.returncode, ran.stderr) == (0, "")
    assert "every one holds" in ran.stdout


def _source() -> str:
    return str(Path(cli.__file__).resolve().parents[2])


def unguarded(folder: Path) -> sqlite3.Connection:
    """Return a connection to the database with its guards taken off, as a forger would."""
    db = sqlite3.connect(folder / DATABASE, isolation_level=None)
    for name in ("entry_never_update", "entry_never_delete"):
        db.execute(f"DROP TRIGGER {name}")
    return db


TAMPERED = {
    "a word changed in a body": (
        "UPDATE entry SET body = CAST(replace(CAST(body AS TEXT), 'R-0504', 'R-0505')"
        " AS BLOB) WHERE seq = 20", 20
    ),
    "a signature of zeros": ("UPDATE entry SET sig = zeroblob(64) WHERE seq = 7", 7),
    "another hash": ("UPDATE entry SET hash = zeroblob(32) WHERE seq = 5", 5),
    "an entry gone from the middle": ("DELETE FROM entry WHERE seq = 9", 9),
    "the end cut off": (
        "DELETE FROM entry WHERE seq > (SELECT MAX(seq) - 2 FROM entry)", None
    ),
    "a body that is no text": ("UPDATE entry SET body = x'ff00' WHERE seq = 3", 3),
}  # fmt: skip


@pytest.mark.parametrize("how", TAMPERED)
def test_verify_names_the_log_and_the_entry_of_a_tampered_copy(folder, how):
    statement, seq = TAMPERED[how]
    with closing(unguarded(folder)) as db:
        log, last = db.execute("SELECT log, MAX(seq) FROM entry GROUP BY log").fetchone()
        db.execute(statement)
    code, said, report = run_verify(folder)
    place = last - 1 if seq is None else seq
    assert (code, report["chain"]) == (1, "broken")
    assert (report["first_fault"]["log"], report["first_fault"]["seq"]) == (log, place)
    assert said.startswith(f"log {log}, entry {place}: ")
    assert len(said.splitlines()) == 1


def test_a_node_does_not_start_on_a_log_whose_end_was_tampered_with(folder, clock):
    with closing(unguarded(folder)) as db:
        db.execute("UPDATE entry SET sig = zeroblob(64) WHERE seq = (SELECT MAX(seq) FROM entry)")
    with pytest.raises(BadEntry, match="does not hold"):
        Store.open(folder, clock)


def test_verify_says_of_a_database_that_cannot_be_read_what_to_do(folder):
    (folder / DATABASE).write_bytes(b"not a database" * 400)
    code, said, report = run_verify(folder)
    assert (code, report["chain"]) == (1, "broken")
    assert "cannot be read" in said
    assert "Restore it" in said


def test_verify_says_of_a_folder_without_a_record_that_there_is_none(tmp_path):
    code, said, _ = run_verify(tmp_path)
    assert code == 1
    assert said.startswith("There is no database")
    assert list(tmp_path.iterdir()) == []


def test_private_text_that_was_changed_is_found(folder):
    with closing(sqlite3.connect(folder / DATABASE, isolation_level=None)) as db:
        db.execute(
            "UPDATE private SET p = CAST(replace(CAST(p AS TEXT), 'Oddmarrow', 'Evenmarrow') AS"
            " BLOB)"
        )
    code, said, _ = run_verify(folder)
    assert code == 1
    assert said


def test_a_route_is_what_a_node_knows_after_a_rebuild_by_command(folder, clock):
    ran = CliRunner().invoke(cli.main, ["rebuild", "--data", str(folder)])
    assert ran.exit_code == 0, ran.output
    with Store.open(folder, clock) as store, store.pages() as pages:
        assert pages.route(ROUTE)["sampler"] == "sampler-1"
        with store.reader() as db:
            assert ledger.head(db, store.current_log(db)).seq == count(store)
