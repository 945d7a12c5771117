"""Print the table: name, ours, peer, ratio, limit, and whether it holds."""

import os
import sqlite3
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

from tests.bench.kitchen import kitchen_post
from tests.bench.labels import labels
from tests.bench.lighthouse import lighthouse
from tests.bench.measured import Measured
from tests.bench.start import start

Group = Callable[[Path], list[Measured]]

GROUPS: dict[str, Group] = {
    "start": start,
    "kitchen": kitchen_post,
    "labels": lambda _folder: labels(),
}

COMPARED = """\
start    From the process to the first page, of a folder with a round in it.
Kitchen  A whole HTTP post that checks its form, reads what was recorded, decides, signs, tells the
         page tables and commits durably. The bare Flask post crosses HTTP too and keeps the fields
         by one INSERT and COMMIT; five of those are allowed. The bare INSERT + COMMIT has no HTTP
         and no process between; a bare Flask post is about four of those, so twenty are allowed.
labels   Made from words: codes to QR, wordings fitted to the paper, drawn. The peers are handed the
         finished vectors. By the canvas's calls they are drawing alone, and making and fitting may
         take twice as long again; written as text they are the least a file of them can take;
         six of those are allowed, about twice what the calls take."""


def main() -> None:
    """Measure in a folder of its own and print."""
    print(
        f"{os.cpu_count()} cores, Python {sys.version.split()[0]}, SQLite {sqlite3.sqlite_version}"
    )
    print(f"{'':<58}{'ours ms':>9}{'peer ms':>9}{'ratio':>8}{'limit':>7}")
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for part, measure in GROUPS.items():
            for row in measure(folder / part):
                print(line(row), flush=True)
        print(f"\n{COMPARED}\n", flush=True)
        for said in lighthouse(folder / "lighthouse"):
            print(said, flush=True)


def line(row: Measured) -> str:
    """Return one line of the table."""
    holds = "holds" if row.ratio <= row.limit else "PASSED OVER"
    return (
        f"{row.name:<58}{row.ours_ms:>9.1f}{row.peer_ms:>9.2f}{row.ratio:>8.1f}"
        f"{row.limit:>7.0f}  {holds}"
    )


if __name__ == "__main__":
    main()
