"""Where a rehearsal's nodes lie: a folder that goes with it, or one that the person keeps."""

import contextlib
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

from fieldapp import identity
from sync.errors import Unsuitable
from sync.folder import FolderLock


@contextlib.contextmanager
def folder_for(keep: Path | None, prefix: str) -> Iterator[Path]:
    """Lend the folder to keep, made where it is not there; else a throwaway one."""
    if keep is not None:
        keep.mkdir(parents=True, exist_ok=True)
        yield keep
        return
    with tempfile.TemporaryDirectory(prefix=prefix) as name:
        yield Path(name)


def make_room(folder: Path) -> None:
    """Remove the nodes of an earlier rehearsal; all of them or, where one must stay, none.

    Raises:
        Unsuitable, FolderHeld: Something else lies there, or its node runs.
    """
    earlier = [one for one in (folder / "central", *folder.glob("tablet*")) if one.exists()]
    for one in earlier:
        _require_rehearsal(one)
    for one in earlier:
        shutil.rmtree(one)


def _require_rehearsal(folder: Path) -> None:
    """Let a folder be replaced only where a rehearsal made it and no node holds it: never records.

    Raises:
        Unsuitable, FolderHeld: Something else lies there, or its node runs.
    """
    if not (identity.exists(folder) and identity.read(folder).scripted):
        raise Unsuitable(
            f"{folder} is there and no rehearsal made it, so it is left as it is. "
            "Name another folder for --keep."
        )
    with FolderLock(folder):
        pass
