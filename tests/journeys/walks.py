"""Rehearsals for tests: the shipped one walked whole and kept, and short ones made from it."""

import copy
import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from click.testing import CliRunner, Result

from fieldapp.cli import main
from fieldapp.clock import write_script
from fieldapp.store import Store
from tests.nodes import SHIPPED

KEYS = ["visits", "bottles", "entries", "photos", "findings", "ninetieth", "chain"]
COUNTS = ["issued", "filled", "received", "refused", "to_analyse", "resulted"]
LONGEST_S = 120.0
"""No rehearsal takes nearly so long; one that hangs ends here."""


@dataclass(frozen=True)
class Walked:
    """What a rehearsal came to: its exit code and both outputs."""

    code: int
    out: str
    err: str

    @property
    def account(self) -> dict[str, Any]:
        """The JSON on standard output, which must be all that stands there."""
        return dict(json.loads(self.out))

    @property
    def bottles(self) -> dict[str, int]:
        """The counts of bottles."""
        return dict(self.account["bottles"])

    @property
    def kinds(self) -> list[str]:
        """The kinds of the findings that are open."""
        return sorted(one["kind"] for one in self.account["findings"])


def run(*words: str, cwd: Path, env: Mapping[str, str]) -> Walked:
    """Run the program as a person does, in a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", "fieldapp.cli", *words],
        cwd=cwd,
        env=env,
        capture_output=True,
        text=True,
        timeout=LONGEST_S,
        check=False,
    )
    return Walked(done.returncode, done.stdout, done.stderr)


def bare(home: Path, spare: Path) -> dict[str, str]:
    """Return the surroundings of a machine on which nobody ever used the program."""
    homes = ("HOME", "USERPROFILE", "APPDATA", "LOCALAPPDATA")
    temporary = ("TMPDIR", "TEMP", "TMP")
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("XDG_", "PYTHON"))}
    return {**kept, **dict.fromkeys(homes, str(home)), **dict.fromkeys(temporary, str(spare))}


def command(*words: str) -> Result:
    """Run a command in this process."""
    done = CliRunner().invoke(main, words)
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done


def rehearse(file: Path, *more: str) -> Walked:
    """Rehearse a route file; its nodes are processes, the walker is this one."""
    done = command("rehearse", str(file), "--json", *more)
    return Walked(done.exit_code, done.stdout, done.stderr)


def rehearsals_node(folder: Path) -> None:
    """Make a rehearsal's empty node, as an earlier rehearsal left one."""
    folder.mkdir(parents=True)
    write_script(folder, 0)
    Store.open(folder, scripted=True).close()


def shipped_plan() -> dict[str, Any]:
    """Return the shipped round, to be changed as a test likes."""
    return copy.deepcopy(json.loads(SHIPPED.read_text("utf-8")))


def only(plan: dict[str, Any], visits: Iterable[str]) -> dict[str, Any]:
    """Leave the plan with these visits alone, in the rehearsal too; its bottles in no cooler."""
    wanted = set(visits)
    for route in plan["routes"]:
        route["visits"] = [one for one in route["visits"] if one["id"] in wanted]
    script = plan["rehearsal"]
    script["visits"] = [one for one in script["visits"] if one["id"] in wanted]
    script.pop("coolers", None)
    script["results"] = [one for one in script["results"] if one["visit"] in wanted]
    return plan


def written(folder: Path, plan: dict[str, Any], name: str = "day.json") -> Path:
    """Write the plan as a route file."""
    file = folder / name
    file.write_text(json.dumps(plan), "utf-8")
    return file


def short(folder: Path, visits: Iterable[str], change: Callable[[dict[str, Any]], None]) -> Path:
    """Write a file with some of the shipped visits, changed."""
    plan = only(shipped_plan(), visits)
    change(plan)
    return written(folder, plan)


def script_of(plan: dict[str, Any], visit: str) -> dict[str, Any]:
    """Return what the rehearsal says of a visit."""
    return next(one for one in plan["rehearsal"]["visits"] if one["id"] == visit)
