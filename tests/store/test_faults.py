"""What befalls a record: a disk that is full or fails, a copy put back, two histories."""

import shutil
import sqlite3
from contextlib import closing
from pathlib import Path

import pytest

from fieldapp.domain import facts
from fieldapp.store import BALLAST, DATABASE, RecordStopped, Store
from sync.entry import Realm
from sync.errors import NotKept
from sync.verify import verify_folder
from tests import nodes
from tests.nodes import bodies, count, press

REALM = Realm("tapwitness")
VISIT = "V-0401"


def copy_aside(store: Store, target: Path) -> Path:
    """Copy the database as a backup does, while the node runs."""
    with closing(sqlite3.connect(target)) as copy, store.reader() as db:
        db.backup(copy)
    return target


def put_back(copy: Path, folder: Path) -> None:
    """Put an older copy of the database in the place of the present one."""
    (folder / DATABASE).write_bytes(copy.read_bytes())


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


def test_on_a_nearly_full_disk_no_ballast_takes_the_last_bytes(tmp_path, clock, monkeypatch):
    usage = shutil.disk_usage(tmp_path)
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage._replace(free=12 * 1024 * 1024))
    with Store.open(tmp_path, clock) as store:
        assert not (tmp_path / BALLAST).exists()
        press(store, facts.PersonListed(person="p", roles=("clerk",)))


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
