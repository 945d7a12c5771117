"""The wheel, built here and installed elsewhere, runs without the checkout."""

import json
import subprocess
import sys
import zipfile
from dataclasses import dataclass
from email import message_from_string
from pathlib import Path

import pytest

from fieldapp.places import CHECKOUT, IN_WHEEL
from tests.journeys import walks

PACKAGES = ("fieldapp", "sync")


@dataclass(frozen=True)
class Installed:
    """A wheel, and the folder it was installed into."""

    wheel: Path
    target: Path


def pip(*words: str) -> None:
    """Run pip without asking any index."""
    options = ["-q", "--disable-pip-version-check", "--no-deps", "--no-index"]
    done = subprocess.run(
        [sys.executable, "-m", "pip", *words, *options],
        cwd=CHECKOUT,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert done.returncode == 0, done.stderr


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Installed:
    """Give the wheel of this checkout, installed into a folder far from it."""
    root = tmp_path_factory.mktemp("wheel")
    pip("wheel", str(CHECKOUT), "--no-build-isolation", "-w", str(root / "built"))
    (wheel,) = (root / "built").glob("tapwitness-*.whl")
    pip("install", str(wheel), "--target", str(root / "target"))
    return Installed(wheel, root / "target")


def test_the_wheel_holds_every_file_that_the_program_reads(installed: Installed) -> None:
    wanted = {
        f"{to}{path.relative_to(CHECKOUT / source).as_posix()}"
        for source, to in (
            *((name, f"{name}/") for name in PACKAGES),
            *((name, f"fieldapp/{place}/") for name, place in IN_WHEEL.items()),
        )
        for path in (CHECKOUT / source).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts and path.suffix != ".pyc"
    }
    assert any(name.endswith(".toml") for name in wanted)
    assert any(name.endswith(".html") for name in wanted)
    with zipfile.ZipFile(installed.wheel) as wheel:
        held = set(wheel.namelist())
    assert wanted - held == set()
    rest = {name for name in held - wanted if ".dist-info/" not in name}
    assert rest == set(), "nothing else travels, tests least of all"


def test_the_wheel_names_its_licence_its_needs_and_its_command(installed: Installed) -> None:
    with zipfile.ZipFile(installed.wheel) as wheel:
        texts = {
            name.partition(".dist-info/")[2]: wheel.read(name).decode()
            for name in wheel.namelist()
            if ".dist-info/" in name
        }
    about = message_from_string(texts["METADATA"])
    assert about["License-Expression"] == "Apache-2.0"
    assert "licenses/LICENSE" in texts
    assert about["Requires-Python"] == ">=3.11"
    needs = [need for need in about.get_all("Requires-Dist") or [] if "extra ==" not in need]
    assert any(need.startswith("sqlite-utils") for need in needs)
    assert "tapwitness = fieldapp.cli:main" in texts["entry_points.txt"]


def test_installed_elsewhere_it_rehearses_the_shipped_round(
    installed: Installed, tmp_path: Path
) -> None:
    home, spare, elsewhere = (tmp_path / name for name in ("home", "spare", "elsewhere"))
    for place in (home, spare, elsewhere):
        place.mkdir()
    env = {**walks.bare(home, spare), "PYTHONPATH": str(installed.target)}
    where = subprocess.run(
        [sys.executable, "-c", "import fieldapp.cli, sync; print(fieldapp.cli.__file__)"],
        cwd=elsewhere, env=env, capture_output=True, text=True, timeout=60, check=True,
    )  # fmt: skip
    assert Path(where.stdout.strip()) == installed.target / "fieldapp" / "cli" / "__init__.py"
    walked = walks.run("rehearse", "--json", cwd=elsewhere, env=env)
    assert walked.code == 0, walked.err
    assert walked.bottles["resulted"] == 11
    assert json.loads(walked.out)["chain"] == "intact"
    assert list(home.rglob("*")) == []
    assert list(spare.rglob("*")) == []
