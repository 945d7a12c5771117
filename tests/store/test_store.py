"""A node's folder: made, held, opened again; its clock and its transactions."""

import sqlite3
import stat
import subprocess
import sys
import threading
from contextlib import closing

import pytest
import sqlite_utils

from fieldapp.clock import ScriptedClock, SystemClock, write_script
from fieldapp.domain import facts
from fieldapp.store import BALLAST, DAMAGED, DATABASE, Store
from sync.errors import FolderHeld, Unsuitable
from sync.folder import read_anchors
from sync.tables import SCHEMA_VERSION
from tests import nodes
from tests.nodes import bodies, count, press

VISIT = "V-0401"


# made and held


def test_an_empty_folder_becomes_a_node_with_its_key_lock_anchor_and_ballast(tmp_path, clock):
    folder = tmp_path / "deep" / "node"
    with Store.open(folder, clock) as store:
        key = folder / "keys" / "device.pem"
        assert stat.S_IMODE(key.stat().st_mode) == 0o600
        assert stat.S_IMODE(key.parent.stat().st_mode) == 0o700
        assert stat.S_IMODE((folder / "node.json").stat().st_mode) == 0o600
        assert (folder / "node.lock").exists()
        assert (folder / BALLAST).stat().st_size == 8 * 1024 * 1024
        (opened,) = bodies(store)
        assert opened["kind"] == "log.opened"
        assert opened["data"]["why"] == "first"
        assert "clock" not in opened["data"]
        assert read_anchors(folder)[opened["log"]].seq == 1


def test_a_folder_opened_again_goes_on_in_the_same_log_with_the_same_key(tmp_path, clock):
    with Store.open(tmp_path, clock) as store:
        dev, log = store.dev, store.current_log(store._db)
        press(store, facts.PersonListed(person="p", roles=("clerk",)))
    with Store.open(tmp_path, clock) as again:
        assert (again.dev, again.current_log(again._db)) == (dev, log)
        assert [body["seq"] for body in bodies(again)] == [1, 2]


def test_a_second_opening_of_a_held_folder_is_refused_in_words(store):
    with pytest.raises(FolderHeld, match="Another running program uses the folder"):
        Store.open(store.folder)


def test_a_second_program_is_refused_the_folder_in_words(store):
    ran = subprocess.run(
        [sys.executable, "-m", "fieldapp.cli", "serve", "--data", str(store.folder)],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert ran.returncode == 1
    assert ran.stdout == ""
    assert ran.stderr.startswith("Another running program uses the folder")
    assert len(ran.stderr.splitlines()) == 1


def test_a_folder_let_go_after_a_refusal_can_be_opened(tmp_path, clock):
    Store.open(tmp_path, clock).close()
    with closing(sqlite3.connect(tmp_path / DATABASE)) as db:
        db.execute("PRAGMA user_version = 99")
    with pytest.raises(Unsuitable, match="A newer program made this database"):
        Store.open(tmp_path, clock)
    with closing(sqlite3.connect(tmp_path / DATABASE)) as db:
        assert db.execute("PRAGMA user_version").fetchone()[0] == 99
        db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
    Store.open(tmp_path, clock).close()


def test_a_closed_node_leaves_no_write_ahead_log(tmp_path, clock):
    with Store.open(tmp_path, clock) as store:
        nodes.import_shipped(store)
        with store.reader() as db:
            assert db.execute("SELECT COUNT(*) FROM entry").fetchone()[0] > 20
        assert (tmp_path / "ledger.db-wal").stat().st_size > 0
    assert sorted(p.name for p in tmp_path.iterdir() if p.name.startswith(DATABASE)) == [DATABASE]


@pytest.mark.parametrize("spoilt", ["no database at all", "torn in the middle"])
def test_a_damaged_database_is_refused_with_a_sentence_and_left_as_it_is(tmp_path, clock, spoilt):
    with Store.open(tmp_path, clock) as store:
        nodes.import_shipped(store)
    path = tmp_path / DATABASE
    raw = path.read_bytes()
    torn = b"not a database" * 400 if spoilt.startswith("no") else _torn(raw)
    path.write_bytes(torn)
    with pytest.raises(Unsuitable) as refused:
        Store.open(tmp_path, clock)
    assert str(refused.value) == DAMAGED
    assert path.read_bytes() == torn


def _torn(raw: bytes) -> bytes:
    middle = len(raw) // 2 // 4096 * 4096
    return raw[:middle] + b"\xa5" * 4096 * 8 + raw[middle + 4096 * 8 :]


def test_a_key_is_never_made_over_while_the_record_it_signed_is_there(tmp_path, clock):
    Store.open(tmp_path, clock).close()
    key = (tmp_path / "keys" / "device.pem").read_bytes()
    (tmp_path / "node.json").unlink()
    with pytest.raises(Unsuitable, match=r"node\.json is gone"):
        Store.open(tmp_path, clock)
    assert (tmp_path / "keys" / "device.pem").read_bytes() == key


def test_a_start_cut_between_key_and_identity_begins_anew(tmp_path, clock):
    Store.open(tmp_path / "other", clock).close()
    (tmp_path / "node" / "keys").mkdir(parents=True)
    torn = tmp_path / "node" / "keys" / "device.pem"
    torn.write_bytes((tmp_path / "other" / "keys" / "device.pem").read_bytes())
    with Store.open(tmp_path / "node", clock) as store:
        assert count(store) == 1


# clocks


def test_a_real_folder_with_a_script_is_refused(tmp_path):
    Store.open(tmp_path).close()
    write_script(tmp_path, 0)
    with pytest.raises(Unsuitable, match="a real node reads the machine's own clock"):
        Store.open(tmp_path)


def test_an_empty_folder_with_a_script_becomes_no_real_node(tmp_path):
    write_script(tmp_path, 0)
    with pytest.raises(Unsuitable, match="only a rehearsal makes such a node"):
        Store.open(tmp_path)
    assert not (tmp_path / "keys").exists()


def test_a_rehearsals_folder_without_its_script_is_refused(tmp_path):
    write_script(tmp_path, 0)
    Store.open(tmp_path, scripted=True).close()
    (tmp_path / "clock.json").unlink()
    with pytest.raises(Unsuitable, match=r"its clock\.json is gone"):
        Store.open(tmp_path)


def test_a_rehearsals_node_says_so_in_its_first_entry_and_in_its_name(tmp_path):
    write_script(tmp_path, 0)
    with Store.open(tmp_path, scripted=True) as store:
        assert bodies(store)[0]["data"]["clock"] == "scripted"
        assert store.dev.startswith("R-")


def test_a_scripted_shift_moves_wall_and_counter_together_and_the_boot_stays(tmp_path):
    write_script(tmp_path, 0)
    clock = ScriptedClock(tmp_path)
    before = clock.read()
    write_script(tmp_path, 6 * 3600 * 1000, -360)
    after = clock.read()
    moved = (after.at - before.at).total_seconds() * 1000
    # between two readings the machine's own time goes on, the same for both
    assert moved >= 6 * 3600 * 1000
    assert abs((after.mono - before.mono) - moved) <= 2
    assert (after.boot, after.off) == (before.boot, -360)


def test_the_own_clock_reads_utc_to_the_millisecond():
    reading = SystemClock().read()
    assert reading.at.utcoffset().total_seconds() == 0
    assert reading.at.microsecond % 1000 == 0
    assert reading.mono > 0


# transactions


def test_every_connection_has_the_settings_that_keep_what_was_answered_for(store):
    everywhere = {"mmap_size": 0, "foreign_keys": 1, "recursive_triggers": 1,
                  "cell_size_check": 1, "trusted_schema": 0, "busy_timeout": 5000}  # fmt: skip
    writing = {"journal_mode": "wal", "synchronous": 2, "fullfsync": 1, "checkpoint_fullfsync": 1,
               "wal_autocheckpoint": 1000, "journal_size_limit": 16 * 1024 * 1024}  # fmt: skip
    for name, wanted in (everywhere | writing).items():
        assert (name, store._db.execute(f"PRAGMA {name}").fetchone()[0]) == (name, wanted)
    with store.reader() as db:
        for name, wanted in everywhere.items():
            assert (name, db.execute(f"PRAGMA {name}").fetchone()[0]) == (name, wanted)
    assert store._db.execute("PRAGMA application_id").fetchone()[0] == int.from_bytes(b"TapW")
    assert store._db.execute("PRAGMA user_version").fetchone()[0] == SCHEMA_VERSION


def test_a_reader_cannot_write(store):
    with store.reader() as db, pytest.raises(sqlite3.OperationalError, match="readonly"):
        db.execute("INSERT INTO here VALUES ('a', 'b')")


def test_a_reader_sees_one_moment_though_presses_go_on(planned):
    with planned.reader() as db:
        before = db.execute("SELECT COUNT(*) FROM entry").fetchone()[0]
        press(planned, facts.VisitOpened(visit=VISIT))
        assert db.execute("SELECT COUNT(*) FROM entry").fetchone()[0] == before
    with planned.reader() as db:
        assert db.execute("SELECT COUNT(*) FROM entry").fetchone()[0] == before + 1


def test_readers_of_threads_that_ended_are_given_back(store):
    def read() -> None:
        with store.reader() as db:
            db.execute("SELECT 1").fetchone()

    for _ in range(20):
        thread = threading.Thread(target=read)
        thread.start()
        thread.join()
    assert len(store._open_readers) <= 2


def test_a_transaction_inside_a_transaction_is_a_fault_of_the_program(store):
    with (
        pytest.raises(RuntimeError, match="open already"),
        store.transaction(),
        store.transaction(),
    ):
        pass
    with store.transaction():
        store.put("a", "b")
    assert store.get("a") == "b"


def test_what_sqlite_utils_inserts_stands_or_falls_with_the_transaction_around_it():
    # 3.x committed the outer transaction on insert; page tables stand on 4.x not doing so.
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as db:
        tables = sqlite_utils.Database(db)
        tables["t"].create({"a": int}, pk="a")
        db.execute("BEGIN IMMEDIATE")
        tables["t"].insert({"a": 1})
        tables["t"].insert_all([{"a": 2}, {"a": 3}])
        tables["u"].create({"b": int}, if_not_exists=True)
        tables["u"].create_index(["b"], if_not_exists=True)
        assert db.in_transaction
        db.execute("ROLLBACK")
        assert tables.table_names() == ["t"]
        assert db.execute("SELECT COUNT(*) FROM t").fetchone()[0] == 0
