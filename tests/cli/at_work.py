"""The program at work for tests: commands here, nodes in processes of their own."""

import contextlib
import json
import shutil
import socket
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pypdfium2 as pdfium
import zxingcpp
from click.testing import CliRunner, Result

from fieldapp.cli import main
from fieldapp.clock import write_script
from fieldapp.running import RUNNING
from fieldapp.store import Store
from tests import nodes

READY_S = 30.0
HEAD = "bottle,laboratory number,analyte,value,unit"


def command(*words: str | Path) -> Result:
    """Run a command in this process; an exception that is no exit is a fault of the program."""
    done = CliRunner().invoke(main, [str(word) for word in words])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done


def fails(done: Result, *pieces: str, code: int = 1) -> str:
    """Hold that a command says no in one sentence on standard error; return it."""
    assert (done.exit_code, done.stdout) == (code, ""), done.output
    lines = done.stderr.splitlines()
    assert len(lines) == 1, lines
    assert lines[0].endswith(".")
    for piece in pieces:
        assert piece in lines[0]
    return lines[0]


@dataclass
class Node:
    """A node of a folder in a process of its own, with what it says as it starts."""

    folder: Path
    process: subprocess.Popen[str]
    url: str

    @property
    def running(self) -> dict[str, Any]:
        """What it wrote about itself."""
        return dict(json.loads((self.folder / RUNNING).read_text("utf-8")))

    def kill(self) -> None:
        """Cut it off, as a power failure would."""
        self.process.kill()
        self.process.wait(READY_S)


@contextlib.contextmanager
def running(name: str, folder: Path, *options: str) -> Iterator[Node]:
    """Run ``serve`` or ``central`` for a folder until the block ends."""
    words = [sys.executable, "-m", "fieldapp.cli", name, "--data", str(folder), *options]
    with subprocess.Popen(
        words,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    ) as process:
        assert process.stdout is not None
        try:
            line = process.stdout.readline()
            assert line.startswith("http"), line + process.stdout.read()
            yield Node(folder, process, line.strip().rstrip("/"))
        finally:
            if process.poll() is None:
                process.terminate()
            process.wait(READY_S)


def rehearsals(folder: Path, shift_ms: int = 0) -> Path:
    """Make a rehearsal's empty node, whose clock the test may shift."""
    folder.mkdir()
    write_script(folder, shift_ms)
    Store.open(folder, scripted=True).close()
    return folder


def copied(folder: Path, target: Path) -> Path:
    """Copy a closed node's folder."""
    return Path(shutil.copytree(folder, target, ignore=shutil.ignore_patterns("ballast")))


def invited(central: Path, person: str = nodes.SAMPLER) -> str:
    """Return a one-time code for a person."""
    done = command("central", "--invite", person, "--data", central)
    assert done.exit_code == 0, done.stderr
    return done.stdout.strip()


def count(folder: Path) -> int:
    """Return how many entries a folder holds."""
    return int(json.loads(command("verify", "--json", "--data", folder).stdout)["entries"])


def qr_codes(pdf: bytes) -> list[str]:
    """Return what the QR codes of a PDF hold, page by page."""
    document = pdfium.PdfDocument(pdf)
    found = []
    for n in range(len(document)):
        picture = document[n].render(scale=150 / 72).to_pil()
        found += [read.text for read in zxingcpp.read_barcodes(picture)]
    document.close()
    return found


def pages_of(pdf: bytes) -> int:
    """Return how many pages a PDF has."""
    document = pdfium.PdfDocument(pdf)
    pages = len(document)
    document.close()
    return pages


def results(folder: Path, *rows: str, head: str = HEAD) -> Path:
    """Write a laboratory's file."""
    file = folder / "batch.csv"
    file.write_text("\n".join((head, *rows)) + "\n", "utf-8")
    return file


def free_port() -> int:
    """Return a port that nothing listens on now."""
    with socket.socket() as bound:
        bound.bind(("127.0.0.1", 0))
        return int(bound.getsockname()[1])
