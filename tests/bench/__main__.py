"""Print the table: name, ours, peer, ratio, limit, and whether it holds."""

import os
import sqlite3
import sys
import tempfile
from pathlib import Path

from tests.bench.measured import Measured, kitchen_post, start


def main() -> None:
    """Measure in a folder of its own and print."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        rows = [start(folder / "start"), *kitchen_post(folder / "kitchen")]
    print(
        f"{os.cpu_count()} cores, Python {sys.version.split()[0]}, SQLite {sqlite3.sqlite_version}"
    )
    print(f"{'':<50}{'ours ms':>9}{'peer ms':>9}{'ratio':>8}{'limit':>7}")
    for row in rows:
        print(line(row))


def line(row: Measured) -> str:
    """Return one line of the table."""
    holds = "holds" if row.ratio <= row.limit else "PASSED OVER"
    return (
        f"{row.name:<50}{row.ours_ms:>9.1f}{row.peer_ms:>9.2f}{row.ratio:>8.1f}"
        f"{row.limit:>7.0f}  {holds}"
    )


if __name__ == "__main__":
    main()
