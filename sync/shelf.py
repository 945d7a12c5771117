"""Pictures and documents by their SHA-256: whole files, and parts that grow while they arrive.

A whole file of hash ``abcdef…`` is ``ab/cdef…``; what lies there once was whole. What is being
written or received lies elsewhere in the folder until it is.
"""

import hashlib
import os
import re
import sys
import uuid
from collections.abc import Iterator
from pathlib import Path

NAME = re.compile(r"[0-9a-f]{64}\Z")
FOLDER = "blobs"
PARTS = "part"
FRESH = ".new"
STEP_BYTES = 64 * 1024


def is_name(value: object) -> bool:
    """Say whether a value is the name of a blob: 64 digits of lower-case hexadecimal."""
    return isinstance(value, str) and NAME.match(value) is not None


class Shelf:
    """The blobs of one node. Names are checked by the caller (``is_name``) or made here."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def path(self, name: str) -> Path:
        """Return where the whole file lies, or would.

        Raises:
            ValueError: Not a name; no path is ever made of it.
        """
        if not is_name(name):
            raise ValueError(f"{name[:80]!r} is no name of a picture")
        return self.folder / name[:2] / name[2:]

    def has(self, name: str) -> bool:
        """Say whether the whole file is here."""
        return self.path(name).is_file()

    def size(self, name: str) -> int | None:
        """Return the bytes of a whole file, None where it is not here."""
        try:
            return self.path(name).stat().st_size
        except (FileNotFoundError, NotADirectoryError):
            return None

    def keep(self, data: bytes) -> str:
        """Keep a file and return its name, when its bytes and its place are on disk.

        Raises:
            OSError: The disk is full or fails; nothing is there under that name.
        """
        self.folder.mkdir(parents=True, exist_ok=True)
        fresh = self.folder / f"{uuid.uuid4().hex}{FRESH}"
        digest = hashlib.sha256()
        try:
            with fresh.open("xb") as file:
                for start in range(0, len(data), STEP_BYTES):
                    step = data[start : start + STEP_BYTES]
                    file.write(step)
                    digest.update(step)
                file.flush()
                os.fsync(file.fileno())
            self._place(fresh, digest.hexdigest())
        except BaseException:
            fresh.unlink(missing_ok=True)
            raise
        return digest.hexdigest()

    def offset(self, name: str, length: int) -> int:
        """Return how many bytes of a blob of that length are here."""
        if self.has(name):
            return length
        try:
            return self._part(name).stat().st_size
        except (FileNotFoundError, NotADirectoryError):
            return 0

    def grow(self, name: str, data: bytes) -> None:
        """Add bytes to the end of a part; they are on disk when this returns."""
        part = self._part(name)
        part.parent.mkdir(parents=True, exist_ok=True)
        with part.open("ab") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())

    def finish(self, name: str) -> bool:
        """Make a part whole if its bytes have that hash; else drop it. Say which."""
        part = self._part(name)
        if self.digest(part) != name:
            part.unlink(missing_ok=True)
            return False
        self._place(part, name)
        return True

    def names(self) -> Iterator[str]:
        """Yield the name of every whole file, in order."""
        if not self.folder.is_dir():
            return
        for shelf in sorted(one for one in self.folder.iterdir() if one.is_dir()):
            for path in sorted(shelf.iterdir()):
                if is_name(shelf.name + path.name):
                    yield shelf.name + path.name

    def sound(self, name: str) -> bool:
        """Say whether a whole file still has the bytes of its name."""
        return self.digest(self.path(name)) == name

    def sweep(self) -> None:
        """Remove what a node that was cut off had begun to write."""
        if self.folder.is_dir():
            for path in self.folder.glob(f"*{FRESH}"):
                path.unlink(missing_ok=True)

    @staticmethod
    def digest(path: Path) -> str:
        """Return the SHA-256 of a file in hexadecimal."""
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()

    def _part(self, name: str) -> Path:
        self.path(name)
        return self.folder / PARTS / name

    def _place(self, file: Path, name: str) -> None:
        place = self.path(name)
        if not place.parent.is_dir():
            place.parent.mkdir(parents=True, exist_ok=True)
            _flush(self.folder)
        file.replace(place)
        _flush(place.parent)


def _flush(folder: Path) -> None:
    """Put a folder's own list of names on disk; Windows does that by itself."""
    if sys.platform == "win32":
        return
    number = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(number)
    finally:
        os.close(number)
