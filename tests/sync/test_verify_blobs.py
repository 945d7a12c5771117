"""Verify looks at every photo that lies in the folder; one that is not there is no fault."""

import random
from pathlib import Path

import pytest

from sync.shelf import PARTS, Shelf
from sync.verify import Report

from .harbour import Harbour, Node
from .test_verify import verify_quietly


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    harbour = Harbour()
    node = Node("D-01", folder=tmp_path, seed=1)
    node.pin = harbour.device("D-03").pin
    for number in range(3):
        node.photograph(random.Random(number).randbytes(5000))
    node.close()
    return tmp_path


def files(folder: Path) -> list[Path]:
    return sorted(path for path in (folder / "blobs").rglob("*") if path.is_file())


def test_photos_that_are_what_they_were_are_counted(folder):
    report = verify_quietly(folder)
    assert (report.first_fault, report.blobs) == (None, 3)


def test_a_single_bit_of_any_photo_is_found_and_named(folder):
    chance = random.Random(7)
    for _ in range(60):
        path = chance.choice(files(folder))
        data = bytearray(path.read_bytes())
        place = chance.randrange(len(data) * 8)
        data[place // 8] ^= 1 << place % 8
        path.write_bytes(data)
        fault = verify_quietly(folder).first_fault
        assert fault is not None
        assert f"{path.parent.name}/{path.name}" in fault.says
        data[place // 8] ^= 1 << place % 8
        path.write_bytes(data)
    assert verify_quietly(folder).first_fault is None


@pytest.mark.parametrize("damage", ["cut", "emptied", "another"])
def test_a_photo_that_is_not_itself_is_found(folder, damage):
    first, second, _ = files(folder)
    data = {"cut": first.read_bytes()[:-1], "emptied": b"", "another": second.read_bytes()}
    first.write_bytes(data[damage])
    assert "is not what it was" in verify_quietly(folder).first_fault.says


def test_a_photo_that_is_not_here_is_no_fault(folder):
    files(folder)[0].unlink()
    report = verify_quietly(folder)
    assert (report.first_fault, report.blobs) == (None, 2)


def test_parts_and_what_was_being_written_are_no_photos_yet(folder):
    shelf = Shelf(folder / "blobs")
    shelf.grow("0" * 64, b"half")
    (folder / "blobs" / "abc.new").write_bytes(b"half")
    assert (folder / "blobs" / PARTS).is_dir()
    report = verify_quietly(folder)
    assert (report.first_fault, report.blobs) == (None, 3)


def test_an_older_caller_reads_the_report_as_before():
    assert Report(1, 1, None).blobs == 0
