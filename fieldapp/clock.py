"""The one clock of a node, read as (wall UTC, offset, ms that count sleep or none, boot).

A scripted clock is the machine's own shifted by the milliseconds in ``DATA/clock.json``, read at
every reading; wall and mono shift together, boot stays (design 5, Time).
"""

import json
import sys
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Protocol
from uuid import uuid4

from fieldapp.domain.recorded import Reading

SCRIPT = "clock.json"


class Clock(Protocol):
    """What a node asks for the time."""

    scripted: bool

    def read(self) -> Reading:
        """Return this moment."""


class SystemClock:
    """The machine's own clock."""

    scripted = False

    def __init__(self) -> None:
        self._boot = boot_id()

    def read(self) -> Reading:
        """Return this moment; mono counts suspend where the system can tell it."""
        now = datetime.now(UTC)
        offset = now.astimezone().utcoffset() or timedelta(0)
        return Reading(_to_ms(now), int(offset.total_seconds() // 60), mono_ms(), self._boot)


class ScriptedClock:
    """The machine's clock, shifted by a file that whoever made the node replaces."""

    scripted = True

    def __init__(self, folder: Path) -> None:
        self._file = folder / SCRIPT
        self._own = SystemClock()

    def read(self) -> Reading:
        """Return the shifted moment; wall and mono shift together."""
        shift_ms, offset = read_script(self._file)
        own = self._own.read()
        return Reading(
            own.at + timedelta(milliseconds=shift_ms),
            own.off if offset is None else offset,
            own.mono + shift_ms,
            own.boot,
        )


def read_script(file: Path) -> tuple[int, int | None]:
    """Return the shift in milliseconds and, where the script names one, the zone's offset."""
    script = json.loads(file.read_text("utf-8"))
    return int(script["shift_ms"]), script.get("off")


def write_script(folder: Path, shift_ms: int, off: int | None = None) -> None:
    """Replace the script of a rehearsal's clock in one step, so that no reading sees half of it."""
    file = folder / SCRIPT
    half = file.with_suffix(".new")
    half.write_text(json.dumps({"shift_ms": shift_ms, "off": off}), "utf-8")
    half.replace(file)


def mono_ms() -> int:
    """Return milliseconds on a clock that counts suspend; its zero means nothing.

    Source: sync.md B8, PEP 418: CLOCK_BOOTTIME on Linux; elsewhere the system's monotonic clock,
    which counts suspend on Windows (from memory, check).
    """
    if sys.platform == "linux":
        return time.clock_gettime_ns(time.CLOCK_BOOTTIME) // 1_000_000
    return time.monotonic_ns() // 1_000_000


def boot_id() -> str:
    """Return an id of this run of the operating system; a fresh one where it gives none."""
    try:
        text = Path("/proc/sys/kernel/random/boot_id").read_text("ascii").strip()
        return text.replace("-", "")[:12]
    except OSError:
        return uuid4().hex[:12]


def _to_ms(at: datetime) -> datetime:
    return at.replace(microsecond=at.microsecond // 1000 * 1000)
