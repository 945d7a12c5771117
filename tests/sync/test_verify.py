"""Verify: whatever is done to a copy of a folder is found, in its place, and changes nothing."""

import hashlib
import json
import os
import shutil
import sqlite3
from pathlib import Path

import pytest

from sync import ledger
from sync.entry import b64, compose
from sync.folder import FolderLock, write_anchor
from sync.keys import DeviceKey
from sync.ledger import Head
from sync.verify import Fault, verify_folder

from .harbour import REALM, Harbour, Node


def state(folder: Path) -> dict[str, tuple[str, int]]:
    """Return every file's hash and time of change, by name."""
    return {
        str(path.relative_to(folder)): (
            hashlib.sha256(path.read_bytes()).hexdigest(),
            path.stat().st_mtime_ns,
        )
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def verify_quietly(folder: Path):
    before, names = state(folder), sorted(os.listdir(folder))
    report = verify_folder(folder, REALM)
    assert (state(folder), sorted(os.listdir(folder))) == (before, names)
    return report


@pytest.fixture(scope="module")
def original(tmp_path_factory) -> Path:
    """Return the closed folder of a device that wrote two logs and borrowed from central."""
    folder = tmp_path_factory.mktemp("original")
    harbour = Harbour()
    neighbour = harbour.device("D-02", "route:1", seed=2)
    neighbour.note("by the neighbour", "route:1", private={"name": "N"})
    harbour.sync(neighbour)
    node = Node("D-01", folder=folder, seed=1)
    harbour.central.vouch("D-01", node.key.public)
    harbour.central.grant("D-01", "route:1")
    node.pin = harbour.device("D-03").pin
    node.asks = ["route:1"]
    for number in range(10):
        node.note(f"note {number}", "route:1", private={"name": f"A. Nobody {number}"})
    with node.transaction() as db:
        node.open_log(db, "restored")
    for number in range(3):
        node.note(f"second {number}")
    harbour.sync(node)
    assert node.db.execute("SELECT COUNT(*) FROM borrowed").fetchone()[0] > 5
    node.close()
    (folder / "central.json").write_text(
        json.dumps({"url": "x", "public_key": b64(harbour.central.key.public)})
    )
    FolderLock(folder).acquire().release()
    return folder


@pytest.fixture
def copy(original, tmp_path) -> Path:
    return Path(shutil.copytree(original, tmp_path / "copy"))


def tamper(folder: Path, *statements: str, values: tuple[object, ...] = ()) -> None:
    """Change a copy as somebody would who knows SQLite: guards off, then on again."""
    db = sqlite3.connect(folder / "ledger.db", isolation_level=None)
    guards = [sql for (sql,) in db.execute("SELECT sql FROM sqlite_master WHERE type = 'trigger'")]
    for sql in guards:
        db.execute(f"DROP TRIGGER {sql.split()[2]}")
    for statement in statements:
        assert db.execute(statement, values).rowcount > 0
    for sql in guards:
        db.execute(sql)
    db.close()


def logs_of(folder: Path) -> list[str]:
    db = sqlite3.connect(f"file:{folder / 'ledger.db'}?mode=ro&immutable=1", uri=True)
    found = [log for (log,) in db.execute("SELECT DISTINCT log FROM entry ORDER BY log")]
    db.close()
    return found


def test_an_untouched_folder_holds(copy):
    report = verify_quietly(copy)
    assert report.first_fault is None
    assert report.logs == 2
    assert report.entries > 20


@pytest.mark.parametrize("column", ["body", "sig", "hash"])
@pytest.mark.parametrize("seq", [1, 2, 4])
def test_one_changed_byte_is_found_in_its_place(copy, column, seq):
    log = logs_of(copy)[1]
    db = sqlite3.connect(copy / "ledger.db")
    where = f"WHERE log = '{log}' AND seq = {seq}"
    changed = bytearray(db.execute(f"SELECT {column} FROM entry {where}").fetchone()[0])
    db.close()
    changed[17] ^= 1
    tamper(copy, f"UPDATE entry SET {column} = ? {where}", values=(bytes(changed),))
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, seq)


@pytest.mark.parametrize("column", ["body", "sig", "hash"])
def test_one_flipped_bit_in_the_file_itself_is_found(copy, column):
    log = logs_of(copy)[0]
    db = sqlite3.connect(f"file:{copy / 'ledger.db'}?mode=ro&immutable=1", uri=True)
    wanted = db.execute(f"SELECT {column} FROM entry WHERE log = ? AND seq = 3", (log,)).fetchone()[
        0
    ]
    db.close()
    raw = bytearray((copy / "ledger.db").read_bytes())
    place = raw.find(wanted)
    assert place > 0
    raw[place + 11] ^= 1
    (copy / "ledger.db").write_bytes(raw)
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    # A hash also stands in an index, which then no longer agrees with its table.
    assert (fault.log, fault.seq) == ((log, 3) if column != "hash" else ("", 0))


def test_a_dropped_last_entry_is_missed_by_its_anchor(copy):
    for log in logs_of(copy):
        folder = Path(shutil.copytree(copy, copy.with_name(f"short {log}")))
        db = sqlite3.connect(f"file:{folder / 'ledger.db'}?mode=ro", uri=True)
        last = db.execute("SELECT MAX(seq) FROM entry WHERE log = ?", (log,)).fetchone()[0]
        db.close()
        tamper(folder, f"DELETE FROM entry WHERE log = '{log}' AND seq = {last}")
        fault = verify_quietly(folder).first_fault
        assert fault is not None
        assert (fault.log, fault.seq) == (log, last)
        assert f"had reached {last}" in fault.says


def test_a_dropped_last_entry_is_missed_by_central_too_when_the_anchor_is_gone(copy):
    log = logs_of(copy)[0]
    (copy / "anchor" / log).unlink()
    tamper(
        copy,
        f"DELETE FROM entry WHERE log = '{log}' AND seq = "
        f"(SELECT MAX(seq) FROM entry WHERE log = '{log}')",
    )
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert fault.log == log
    assert "acknowledged" in fault.says


def test_a_dropped_log_is_missed_by_its_anchor(copy):
    log = logs_of(copy)[1]
    tamper(copy, f"DELETE FROM entry WHERE log = '{log}'")
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, 1)


@pytest.mark.parametrize("seq", [1, 2, 3])
def test_a_dropped_middle_entry_is_a_gap(copy, seq):
    log = logs_of(copy)[0]
    tamper(copy, f"DELETE FROM entry WHERE log = '{log}' AND seq = {seq}")
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, seq)
    assert "missing" in fault.says


def test_two_entries_in_each_others_place_are_found(copy):
    log = logs_of(copy)[0]
    tamper(
        copy,
        f"UPDATE entry SET seq = 1002 WHERE log = '{log}' AND seq = 2",
        f"UPDATE entry SET seq = 2 WHERE log = '{log}' AND seq = 3",
        f"UPDATE entry SET seq = 3 WHERE log = '{log}' AND seq = 1002",
    )
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, 2)


def test_an_entry_made_anew_with_the_right_key_breaks_the_chain_after_it(copy):
    log = logs_of(copy)[0]
    db = sqlite3.connect(copy / "ledger.db")
    body = json.loads(
        db.execute("SELECT body FROM entry WHERE log = ? AND seq = 3", (log,)).fetchone()[0]
    )
    db.close()
    body["data"] = {"text": "never happened"}
    body.pop("priv", None)
    forged = compose(REALM, DeviceKey.from_seed(bytes([1]) * 32), body)
    tamper(
        copy,
        "UPDATE entry SET hash = ?, body = ?, sig = ? WHERE log = ? AND seq = 3",
        values=(forged.hash, forged.body, forged.sig, log),
    )
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, 4)


def test_a_changed_borrowed_entry_is_found(copy):
    tamper(
        copy,
        "UPDATE borrowed SET sig = zeroblob(64) WHERE rowid = (SELECT MAX(rowid) FROM borrowed)",
    )
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert "signature" in fault.says


def test_a_borrowed_entry_of_a_stranger_is_found(copy):
    stranger = compose(
        REALM,
        DeviceKey.generate(),
        {"log": "A" * 22, "seq": 7, "prev": "", "dev": "D-02", "kind": "note.made", "data": {}},
    )
    db = sqlite3.connect(copy / "ledger.db", isolation_level=None)
    ledger.borrow(db, stranger, scope="all", at="t", frm="C-01")
    db.close()
    fault = verify_quietly(copy).first_fault
    assert fault == Fault(
        "A" * 22, 7, "It is signed with a key that nobody in this folder vouches for."
    )


@pytest.mark.parametrize(
    "change",
    [
        'UPDATE private SET p = CAST(\'{"name":"B","salt":"x"}\' AS BLOB)',
        "UPDATE private SET h = randomblob(32)",
        "INSERT INTO private VALUES (randomblob(32), CAST('{}' AS BLOB))",
    ],
)
def test_a_private_part_that_is_not_the_one_signed_is_found(copy, change):
    tamper(copy, change)
    assert verify_quietly(copy).first_fault is not None


def test_purged_private_parts_leave_the_folder_whole(copy):
    tamper(copy, "DELETE FROM private")
    assert verify_quietly(copy).first_fault is None


def test_presses_are_no_evidence(copy):
    db = sqlite3.connect(copy / "ledger.db", isolation_level=None)
    db.execute("INSERT INTO act (id, fields_hash) VALUES ('made up', 'x')")
    db.close()
    assert verify_quietly(copy).first_fault is None


def test_a_false_acknowledgement_is_found(copy):
    tamper(copy, "UPDATE acknowledgement SET sig = zeroblob(64)")
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert "acknowledgement" in fault.says


def test_an_anchor_that_names_another_entry_is_believed(copy):
    log = logs_of(copy)[0]
    write_anchor(copy, log, Head(2, bytes(32)))
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, 2)


def test_a_damaged_anchor_is_a_fault(copy):
    (copy / "anchor" / logs_of(copy)[0]).write_text("no anchor")
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert "anchor" in fault.says


@pytest.mark.parametrize(
    "content", [b"", b"not a database at all", b"SQLite format 3\0" + b"x" * 9000]
)
def test_what_is_no_database_is_a_fault_with_a_sentence(copy, content):
    (copy / "ledger.db").write_bytes(content)
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == ("", 0)
    assert fault.says.endswith(".")


def test_an_empty_folder_is_a_fault_with_a_sentence(tmp_path):
    fault = verify_quietly(tmp_path).first_fault
    assert fault is not None
    assert "no database" in fault.says


def test_a_garbled_page_is_a_fault(copy):
    raw = bytearray((copy / "ledger.db").read_bytes())
    for start in range(4096, len(raw) - 4096, 4096):
        raw[start + 5 : start + 40] = b"\xff" * 35
    (copy / "ledger.db").write_bytes(raw)
    fault = verify_quietly(copy).first_fault
    assert fault is not None
    assert fault.log == ""


def test_what_a_cut_off_node_left_is_read_from_a_copy_and_stays_as_it_is(tmp_path):
    folder, cut = tmp_path / "live", tmp_path / "cut"
    folder.mkdir()
    node = Node("D-01", folder=folder)
    node.note("before the power failed")
    shutil.copytree(folder, cut)
    node.close()
    (cut / "ledger.db-shm").unlink()
    assert (cut / "ledger.db-wal").stat().st_size > 0
    report = verify_quietly(cut)
    assert (report.first_fault, report.entries) == (None, 2)


def test_a_running_nodes_folder_is_read_beside_it(tmp_path):
    node = Node("D-01", folder=tmp_path)
    node.note("one")
    with FolderLock(tmp_path):
        report = verify_quietly(tmp_path)
        assert (report.first_fault, report.entries) == (None, 2)
        node.note("two")
        assert verify_quietly(tmp_path).entries == 3
    node.close()


def test_a_device_that_central_never_enrolled_is_found_at_central(tmp_path):
    central = Node("C-01", folder=tmp_path)
    central.vouch("D-01", DeviceKey.generate().public)
    stranger = Node("D-01")
    for entry in ledger.read(stranger.db, stranger.own_logs(stranger.db)[0], 1, 9):
        with central.transaction() as db:
            ledger.add(db, entry, at="t", frm="D-01")
    log = stranger.own_logs(stranger.db)[0]
    central.close()
    fault = verify_quietly(tmp_path).first_fault
    assert fault is not None
    assert (fault.log, fault.seq) == (log, 1)


def test_progress_tells_done_of_all(copy):
    told: list[tuple[int, int]] = []
    report = verify_folder(copy, REALM, progress=lambda done, of: told.append((done, of)))
    assert told[-1] == (report.entries, report.entries)
