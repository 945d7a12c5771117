"""The data folder: one node at a time, anchors beside the record, a place that can be trusted."""

import subprocess
import sys
from pathlib import Path

import pytest

from sync import folder as places
from sync.entry import new_log_id
from sync.errors import FolderHeld, Unsuitable
from sync.folder import FolderLock, QuietHold, check_place, read_anchors, write_anchor
from sync.ledger import Head


def test_a_second_program_is_turned_away_until_the_first_lets_go(tmp_path):
    lock = FolderLock(tmp_path)
    with lock, pytest.raises(FolderHeld, match="Another running program"):
        FolderLock(tmp_path).acquire()
    with FolderLock(tmp_path):
        pass


def test_the_lock_holds_between_processes_and_ends_with_its_holder(tmp_path):
    code = (
        "import sys; from pathlib import Path; from sync.folder import FolderLock; "
        "FolderLock(Path(sys.argv[1])).acquire(); print('held', flush=True); sys.stdin.read()"
    )
    holder = subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path)],
        cwd=Path(places.__file__).parents[1],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert holder.stdout is not None
    assert holder.stdout.readline() == "held\n"
    with pytest.raises(FolderHeld):
        FolderLock(tmp_path).acquire()
    holder.kill()
    holder.communicate()
    FolderLock(tmp_path).acquire().release()


def test_a_quiet_reader_sees_a_node_and_keeps_one_from_starting(tmp_path):
    with QuietHold(tmp_path) as quiet:
        assert not quiet.held
    assert list(tmp_path.iterdir()) == []
    with FolderLock(tmp_path), QuietHold(tmp_path) as quiet:
        assert quiet.held
    with QuietHold(tmp_path), pytest.raises(FolderHeld):
        FolderLock(tmp_path).acquire()
    FolderLock(tmp_path).acquire().release()


def test_anchors_come_back_and_the_last_one_counts(tmp_path):
    one, two = new_log_id(), new_log_id()
    assert read_anchors(tmp_path) == {}
    write_anchor(tmp_path, one, Head(1, bytes(32)))
    write_anchor(tmp_path, one, Head(2, b"\x01" * 32))
    write_anchor(tmp_path, two, Head(9, b"\x02" * 32))
    assert read_anchors(tmp_path) == {one: Head(2, b"\x01" * 32), two: Head(9, b"\x02" * 32)}


@pytest.mark.parametrize("text", ["", "{}", '{"hash":"","log":"x","seq":1}', "\0\0\0"])
def test_a_damaged_anchor_is_named(tmp_path, text):
    log = new_log_id()
    write_anchor(tmp_path, log, Head(1, bytes(32)))
    (tmp_path / "anchor" / log).write_text(text)
    with pytest.raises(Unsuitable, match=log):
        read_anchors(tmp_path)


@pytest.mark.parametrize("name", ["../elsewhere", "", "a" * 23, "a/b"])
def test_no_anchor_is_written_outside_its_folder(tmp_path, name):
    with pytest.raises(Unsuitable, match="no log id"):
        write_anchor(tmp_path, name, Head(1, bytes(32)))


@pytest.mark.parametrize(
    "part", ["HomeCloud", "Town Drive", "TownDrive - Waterworks", "CloudStorage", "someCLOUD"]
)
def test_a_folder_that_is_copied_about_is_refused(tmp_path, part):
    with pytest.raises(Unsuitable, match="elsewhere on this machine"):
        check_place(tmp_path / part / "data")


@pytest.mark.parametrize("part", ["data", "usb-drive", "External Drive", "drive", "cloudy", "d"])
def test_an_ordinary_folder_is_taken(tmp_path, part):
    check_place(tmp_path / part)


@pytest.mark.parametrize(
    ("kind", "refused"), [("nfs4", True), ("cifs", True), ("ext4", False), ("btrfs", False)]
)
def test_a_disk_of_another_machine_is_refused(tmp_path, monkeypatch, kind, refused):
    point = str(tmp_path / "far away").replace(" ", "\\040")
    mounts = tmp_path / "mountinfo"
    mounts.write_text(
        "22 1 8:1 / / rw shared:1 - ext4 /dev/a rw\n"
        f"40 22 0:50 / {point} rw,relatime shared:2 - {kind} host:/x rw\n"
    )
    monkeypatch.setattr(places, "MOUNTS", mounts)
    check_place(tmp_path / "near")
    if refused:
        with pytest.raises(Unsuitable, match=f"another machine .{kind}"):
            check_place(tmp_path / "far away" / "data")
    else:
        check_place(tmp_path / "far away" / "data")
