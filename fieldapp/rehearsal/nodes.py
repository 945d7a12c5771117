"""Throwaway nodes for a rehearsal: folders with scripted clocks, and their processes."""

import os
import subprocess
import sys
import threading
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from types import TracebackType

from fieldapp.clock import SCRIPT, read_script, write_script
from fieldapp.domain.timetext import zone_named
from fieldapp.running import read_running
from fieldapp.store import Store

READY_S = 20.0


class NotStarted(Exception):
    """A node's process did not come up; its last words are in the message."""


@dataclass
class Time:
    """The script that every node of the rehearsal reads; it only moves forward."""

    zone: str
    folders: list[Path] = field(default_factory=list)
    shift: timedelta = timedelta(0)

    @classmethod
    def of(cls, zone: str, folders: list[Path]) -> "Time":
        """Return the time that those folders' nodes read already."""
        shift_ms, _ = read_script(folders[0] / SCRIPT)
        time = cls(zone, list(folders), timedelta(milliseconds=shift_ms))
        time._write()
        return time

    def now(self) -> datetime:
        """Return the scripted moment."""
        return datetime.now(UTC) + self.shift

    def join(self, folder: Path) -> None:
        """Let a folder's node read this time."""
        folder.mkdir(parents=True, exist_ok=True)
        self.folders.append(folder)
        self._write()

    def leave(self, folder: Path) -> None:
        """Move that folder's time no further: its node is gone."""
        self.folders.remove(folder)

    def begin(self, at: datetime) -> None:
        """Set the first moment, before any node reads the time; earlier or later than today."""
        self.shift = at - datetime.now(UTC)
        self._write()

    def until(self, at: datetime) -> None:
        """Move on to that moment, in every folder; never back."""
        if at > self.now():
            self.shift = at - datetime.now(UTC)
            self._write()

    def _write(self) -> None:
        offset = self.now().astimezone(zone_named(self.zone)).utcoffset() or timedelta(0)
        for folder in self.folders:
            write_script(folder, _ms(self.shift), int(offset.total_seconds() // 60))


def make_node(folder: Path, time: Time) -> Store:
    """Make a rehearsal's node and return it open."""
    time.join(folder)
    return Store.open(folder, scripted=True)


class Process:
    """A node's own process, as a person starts it."""

    def __init__(self, command: str, folder: Path) -> None:
        self.folder = folder
        self._said: list[str] = []
        self._process = subprocess.Popen(
            [sys.executable, "-m", "fieldapp.cli", command, "--data", str(folder)],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            start_new_session=True,  # a Ctrl-C reaches the demo, which ends its nodes in order
            env={**os.environ, "PYTHONPATH": os.pathsep.join(p for p in sys.path if p)},
        )
        self._ready = threading.Event()
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()

    @property
    def url(self) -> str:
        """Return its address; waits until it answers."""
        self._ready.wait(READY_S)
        running = read_running(self.folder)
        if running is None:
            raise NotStarted(f"The node of {self.folder} did not start: {self.said}")
        return running.url

    @property
    def alive(self) -> bool:
        """Say whether it runs."""
        return self._process.poll() is None

    @property
    def said(self) -> str:
        """Return its last words."""
        return " ".join(self._said)

    def end(self) -> None:
        """End this process, by its own id, and wait until the folder is closed."""
        if self._process.poll() is None:
            self._process.terminate()
        try:
            self._process.wait(15)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait(15)
        self._reader.join(5)
        if self._process.stdout is not None:
            self._process.stdout.close()

    def __enter__(self) -> "Process":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.end()

    def wait(self) -> None:
        """Wait until it ends by itself or by a signal."""
        self._process.wait()

    def _read(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            self._said = [*self._said[-20:], line.rstrip()]
            if line.startswith("http"):
                self._ready.set()
        self._ready.set()


def _ms(length: timedelta) -> int:
    return int(length.total_seconds() * 1000)
