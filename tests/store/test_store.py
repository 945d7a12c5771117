"""A node's folder: made, held, opened again, restored, filled up, verified."""

import hashlib
import json
import sqlite3
import stat
import subprocess
import sys
import threading
from contextlib import closing
from pathlib import Path

import pytest
import sqlite_utils
from click.testing import CliRunner

from fieldapp import cli
from fieldapp.clock import ScriptedClock, SystemClock, write_script
from fieldapp.domain import facts
from fieldapp.store import BALLAST, DAMAGED, DATABASE, RecordStopped, Store
from sync import ledger
from sync.entry import Realm
from sync.errors import BadEntry, FolderHeld, NotKept, Unsuitable
from sync.folder import read_anchors
from sync.verify import verify_folder
from tests import nodes
from tests.nodes import ROUTE, bodies, count, press

REALM = Realm("tapwitness")
VISIT = "V-0401"


def listing(folder: Path) -> dict[str, str]:
    """Return every file under a folder with the hash of its bytes."""
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def copy_aside(store: Store, target: Path) -> Path:
    """Copy the database as a backup does, while the node runs."""
    with closing(sqlite3.connect(target)) as copy, store.reader() as db:
        db.backup(copy)
    return target


def put_back(copy: Path, folder: Path) -> None:
    """Put an older copy of the database in the place of the present one."""
    (folder / DATABASE).write_bytes(copy.read_bytes())


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
        db.execute("PRAGMA user_version = 1")
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
    assert store._db.execute("PRAGMA user_version").fetchone()[0] == 1


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


# a disk that is full, or fails


def fill_up(store: Store) -> None:
    """Leave the database no page to grow by, as on a full disk."""
    pages = store._db.execute("PRAGMA page_count").fetchone()[0]
    store._db.execute(f"PRAGMA max_page_count = {pages}")


def long_note(n: int) -> facts.Fact:
    """Return a fact that takes room on the disk."""
    return facts.DeviationStated(
        visit=VISIT, step="s", deviation="other", reason=f"{n} " + "x" * 1900
    )


def press_until_full(store: Store) -> int:
    """Press until SQLite says that the disk is full; return how many presses were saved."""
    saved = 0
    while True:
        try:
            press(store, long_note(saved))
        except sqlite3.OperationalError as fault:
            assert "full" in str(fault)  # noqa: PT017 - the loop ends here
            return saved
        saved += 1


def test_on_a_full_disk_the_ballast_is_given_up_once_and_the_press_is_saved(planned):
    ballast = planned.folder / BALLAST
    fill_up(planned)
    asked = []

    def decide(pages, reading):
        asked.append(ballast.exists())
        if not ballast.exists():  # what the ballast held is room on the disk now
            planned._db.execute("PRAGMA max_page_count = 100000")
        return [long_note(n) for n in range(40)]

    before = count(planned)
    answer = planned.act("0" * 36, {}, decide, by="sampler-1")
    assert asked == [True, False]
    assert not ballast.exists()
    assert len(answer.entries) == 40
    assert count(planned) == before + 40


def test_without_ballast_a_full_disk_is_said_and_loses_nothing_that_was_saved(planned):
    (planned.folder / BALLAST).unlink()
    fill_up(planned)
    before = count(planned)
    saved = press_until_full(planned)
    assert count(planned) == before + saved
    assert verify_folder(planned.folder, REALM).first_fault is None
    planned._db.execute("PRAGMA max_page_count = 100000")  # somebody freed some space
    press(planned, long_note(0))
    assert count(planned) == before + saved + 1


def test_the_ballast_is_laid_again_at_the_next_start(tmp_path, clock):
    Store.open(tmp_path, clock).close()
    (tmp_path / BALLAST).unlink()
    Store.open(tmp_path, clock).close()
    assert (tmp_path / BALLAST).stat().st_size == 8 * 1024 * 1024


def failing() -> sqlite3.OperationalError:
    """Return what SQLite raises when the disk fails under it."""
    fault = sqlite3.OperationalError("disk I/O error")
    fault.sqlite_errorcode = sqlite3.SQLITE_IOERR_FSYNC
    return fault


@pytest.mark.parametrize("fault", [failing(), NotKept("log", 7)], ids=["failed", "other bytes"])
def test_after_the_disk_failed_nothing_more_is_written_until_the_next_start(tmp_path, clock, fault):
    with Store.open(tmp_path, clock) as store:
        with pytest.raises(RecordStopped, match="not saved"), store.transaction():
            raise fault
        with pytest.raises(RecordStopped, match="Stop the program"):
            press(store, facts.PersonListed(person="p", roles=("clerk",)))
        assert count(store) == 1
    with Store.open(tmp_path, clock) as store:
        press(store, facts.PersonListed(person="p", roles=("clerk",)))
        assert count(store) == 2


# restored from an older copy


@pytest.fixture
def restored(tmp_path, clock):
    """Give a folder whose database is older than its anchor, and the log that it tells of."""
    folder = tmp_path / "node"
    with Store.open(folder, clock) as store:
        nodes.import_shipped(store)
        copy = copy_aside(store, tmp_path / "copy.db")
        log, held = store.current_log(store._db), count(store)
        for n in range(3):
            press(store, long_note(n))
    put_back(copy, folder)
    return folder, log, held


def test_a_restored_copy_is_seen_at_the_start_and_goes_on_in_a_new_log(restored, clock):
    folder, log, held = restored
    with Store.open(folder, clock) as store:
        now = store.current_log(store._db)
        assert now != log
        opened = next(body for body in bodies(store) if body["log"] == now)
        assert opened["data"]["why"] == "restored"
        assert opened["data"]["prev_log"] == log
        press(store, facts.VisitOpened(visit=VISIT))
        grown = [body["log"] for body in bodies(store)]
        assert (grown.count(log), grown.count(now)) == (held, 2)


def test_a_restored_copy_opens_one_new_log_and_not_another_at_each_start(restored, clock):
    folder, _, _ = restored
    logs = []
    for _ in range(3):
        with Store.open(folder, clock) as store:
            logs.append(store.current_log(store._db))
    assert len(set(logs)) == 1


def test_verify_says_of_a_restored_copy_where_its_log_had_been(restored, clock):
    folder, log, held = restored
    Store.open(folder, clock).close()
    fault = verify_folder(folder, REALM).first_fault
    assert (fault.log, fault.seq) == (log, held + 1)
    assert f"had reached {held + 3}" in fault.says


def test_a_copy_from_before_the_present_log_was_opened_is_seen_too(tmp_path, clock):
    folder = tmp_path / "node"
    with Store.open(folder, clock) as store:
        copy = copy_aside(store, tmp_path / "copy.db")
        with store.transaction() as db:
            later = store.open_log(db, "fork")
    put_back(copy, folder)
    with Store.open(folder, clock) as store:
        with store.reader() as db:
            now = store.current_log(db)
        opened = next(body for body in bodies(store) if body["log"] == now)
        assert opened["data"]["why"] == "restored"
        assert now != later


def test_what_a_restored_tablet_had_sent_comes_back_and_then_its_record_verifies(pair, tmp_path):
    tablet, folder = pair.tablet, pair.tablet.folder
    copy = copy_aside(tablet, tmp_path / "copy.db")
    nodes.walk(pair, "V-0401")
    pair.exchange()
    tablet.close()
    put_back(copy, folder)
    pair.tablet = Store.open(folder, pair.clock)
    assert verify_folder(folder, REALM).first_fault is not None
    pair.exchange()
    with pair.tablet.pages() as pages:
        assert pages.visit("V-0401")["state"] == "closed"
    assert verify_folder(folder, REALM).first_fault is None


def test_two_histories_of_one_tablet_are_both_on_the_pages_and_in_a_rebuild(pair, tmp_path):
    tablet, folder = pair.tablet, pair.tablet.folder
    copy = copy_aside(tablet, tmp_path / "copy.db")
    nodes.walk(pair, "V-0401")
    pair.exchange()
    tablet.close()
    put_back(copy, folder)
    for anchor in (folder / "anchor").iterdir():
        anchor.unlink()  # the whole disk was put back: nothing here knows better
    pair.tablet = Store.open(folder, pair.clock)
    nodes.walk(pair, "V-0402")
    pair.exchange()
    for store in (pair.central, pair.tablet):
        with store.pages() as pages:
            states = [pages.visit(visit)["state"] for visit in ("V-0401", "V-0402")]
        assert states == ["closed", "closed"]
        before = nodes.page_tables(store)
        assert any(row[1] == "log.carried" for row in before["p_fact"])
        store.rebuild()
        assert nodes.page_tables(store) == before


# verify


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
    return str(Path(cli.__file__).resolve().parents[1])


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
