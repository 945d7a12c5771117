"""The data folder: its lock, its anchors, and whether its place can be trusted."""

import contextlib
import json
import os
import re
import sys
from pathlib import Path
from types import TracebackType
from typing import Self

from sync.encoding import b64, unb64
from sync.entry import LOG_ID
from sync.errors import FolderHeld, Unsuitable
from sync.ledger import Head

LOCK_NAME = "node.lock"
ANCHOR_FOLDER = "anchor"
MOUNTS = Path("/proc/self/mountinfo")
DRIVE_REMOTE = 4  # GetDriveTypeW

# File systems that live on another machine: their locks and flushes promise less than SQLite
# needs (SQLite, "How To Corrupt An SQLite Database File", section 2.1).
NETWORK_FILE_SYSTEMS = {
    *("afs", "ceph", "cifs", "coda", "davfs", "fuse.davfs", "fuse.glusterfs", "fuse.rclone"),
    *("fuse.s3fs", "fuse.sshfs", "glusterfs", "lustre", "ncpfs", "nfs", "nfs3", "nfs4"),
    *("smb2", "smb3", "smbfs"),
}
# Folders that another program copies about: names that end in a glued-on Cloud or Drive, and
# the two places where one desktop system keeps them. It cannot know all.
COPIED_FOLDER = re.compile(
    r"cloudstorage|mobile documents|.+cloud( drive)?( ?[-(].*)?|.*[a-z] ?drive( ?[-(].*)?",
    re.IGNORECASE,
)
PLAIN_DISK = re.compile(r"(hard|usb|flash|pen|thumb|external|local|data) ?-?_?drive", re.IGNORECASE)


class FolderLock:
    """The exclusive lock on a data folder, held by the one node that may write in it.

    The operating system drops it when the process ends, however it ends.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._number: int | None = None

    def acquire(self) -> Self:
        """Take the lock or raise.

        Raises:
            FolderHeld: Another running program has it.
        """
        if self._number is None:
            number = os.open(self.path / LOCK_NAME, os.O_RDWR | os.O_CREAT, 0o600)
            try:
                _lock(number, shared=False)
            except OSError as fault:
                os.close(number)
                raise FolderHeld(self.path) from fault
            self._number = number
        return self

    def release(self) -> None:
        """Let the folder go; the lock file stays."""
        if self._number is not None:
            _unlock(self._number)
            os.close(self._number)
            self._number = None

    def __enter__(self) -> Self:
        """Take the lock for a ``with`` block."""
        return self.acquire()

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Let the folder go at the block's end."""
        self.release()


class QuietHold:
    """Keeps a node from starting while someone reads its folder, and writes no byte for it.

    ``held`` says whether a node runs already; then nothing is locked.
    """

    def __init__(self, path: Path) -> None:
        self.held = False
        self._number: int | None = None
        lock = path / LOCK_NAME
        with contextlib.suppress(FileNotFoundError):
            self._number = os.open(lock, os.O_RDONLY)
        if self._number is not None:
            try:
                _lock(self._number, shared=True)
            except OSError:
                os.close(self._number)
                self._number, self.held = None, True

    def __enter__(self) -> Self:
        """Go on reading."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Let a node start again."""
        if self._number is not None:
            _unlock(self._number)
            os.close(self._number)
            self._number = None


def write_anchor(folder: Path, log: str, head: Head) -> None:
    """Write how far a log of this node had come, after the commit that brought it there.

    Backups leave anchors out, so a database behind its anchor was restored from a copy.
    """
    if not LOG_ID.fullmatch(log):
        raise Unsuitable(f"{log!r} is no log id, so it gets no anchor.")
    anchors = folder / ANCHOR_FOLDER
    anchors.mkdir(exist_ok=True)
    text = json.dumps({"hash": b64(head.hash), "log": log, "seq": head.seq}, sort_keys=True)
    fresh = anchors / f".{log}.new"
    with fresh.open("w", encoding="ascii") as file:
        file.write(text + "\n")
        file.flush()
        os.fsync(file.fileno())
    fresh.replace(anchors / log)


def read_anchors(folder: Path) -> dict[str, Head]:
    """Return by log how far it had come when its anchor was last written.

    Raises:
        Unsuitable: An anchor that cannot be read; the sentence names it.
    """
    anchors = folder / ANCHOR_FOLDER
    if not anchors.is_dir():
        return {}
    return {
        path.name: _read_anchor(path)
        for path in sorted(anchors.iterdir())
        if not path.name.startswith(".")
    }


def check_place(folder: Path) -> None:
    """Refuse a folder on another machine, or one that another program copies about.

    Raises:
        Unsuitable: With the sentence that says where the folder should lie instead.
    """
    whole = folder.expanduser().resolve()
    for part in whole.parts:
        if COPIED_FOLDER.fullmatch(part) and not PLAIN_DISK.fullmatch(part):
            raise Unsuitable(
                f"The folder {whole} lies under {part!r}, which looks like a folder that is "
                "copied to other machines. That spoils a running database: "
                "put the data folder elsewhere on this machine."
            )
    kind = _file_system(whole)
    if kind in NETWORK_FILE_SYSTEMS:
        raise Unsuitable(
            f"The folder {whole} lies on another machine ({kind}). "
            "Put the data folder on a disk of this one."
        )


def _read_anchor(path: Path) -> Head:
    try:
        value = json.loads(path.read_text("ascii"))
        head = Head(value["seq"], unb64(value["hash"]))
        if value["log"] != path.name or type(head.seq) is not int:
            raise ValueError("another log's anchor")
    except (OSError, ValueError, KeyError, TypeError) as fault:
        raise Unsuitable(
            f"The anchor {path.name} cannot be read, so nobody can say how far that log had "
            "come. Keep a copy of the folder and ask central what it holds."
        ) from fault
    return head


def _file_system(folder: Path) -> str:
    if sys.platform == "win32":
        return _windows_drive(folder)
    try:
        lines = MOUNTS.read_text("utf-8", "surrogateescape").splitlines()
    except OSError:
        return ""  # no such list here (macOS): the folder names are all there is to go by
    return _mounted(lines, folder)


def _mounted(lines: list[str], folder: Path) -> str:
    """Return the type of the file system that holds ``folder`` (proc(5), mountinfo)."""
    best, kind = -1, ""
    for line in lines:
        left, _, right = line.partition(" - ")
        if len(left.split()) < 5 or not right:
            continue
        point = Path(re.sub(r"\\([0-7]{3})", lambda m: chr(int(m[1], 8)), left.split()[4]))
        if folder.is_relative_to(point) and len(point.parts) >= best:
            best, kind = len(point.parts), right.split()[0]
    return kind


if sys.platform == "win32":
    import ctypes
    import msvcrt

    def _lock(number: int, *, shared: bool) -> None:
        msvcrt.locking(number, msvcrt.LK_NBRLCK if shared else msvcrt.LK_NBLCK, 1)

    def _unlock(number: int) -> None:
        os.lseek(number, 0, os.SEEK_SET)
        msvcrt.locking(number, msvcrt.LK_UNLCK, 1)

    def _windows_drive(folder: Path) -> str:
        kind = ctypes.windll.kernel32.GetDriveTypeW(folder.anchor)
        return "cifs" if kind == DRIVE_REMOTE else ""

else:
    import fcntl

    def _lock(number: int, *, shared: bool) -> None:
        # flock, not lockf: closing another descriptor of the file must not drop it.
        fcntl.flock(number, (fcntl.LOCK_SH if shared else fcntl.LOCK_EX) | fcntl.LOCK_NB)

    def _unlock(number: int) -> None:
        fcntl.flock(number, fcntl.LOCK_UN)

    def _windows_drive(folder: Path) -> str:
        return ""
