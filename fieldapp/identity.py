"""Who a node is: its files in the data folder, and the ids it mints."""

import json
import os
import secrets
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import uuid_utils

from fieldapp.clock import SCRIPT, Clock, ScriptedClock, SystemClock
from fieldapp.domain.codes import ALPHABET
from sync.errors import Unsuitable
from sync.keys import DeviceKey, key_id

NODE = "node.json"
CENTRAL = "central.json"
DATABASE = "ledger.db"


@dataclass(frozen=True)
class Identity:
    """What does not change in a node's life; ``cookie`` is this install's cookie name."""

    dev: str
    scripted: bool
    cookie: str
    secret: str


def exists(folder: Path) -> bool:
    """Say whether the folder holds a node."""
    return (folder / NODE).exists()


def make(folder: Path, *, scripted: bool) -> None:
    """Make the node's key and identity file; the key first, so a torn start shows as no node.

    Raises:
        Unsuitable: The folder is not empty in a way that a torn start would leave it.
    """
    if not scripted and (folder / SCRIPT).exists():
        raise Unsuitable(
            f"{SCRIPT} lies in this folder, but only a rehearsal makes such a node. "
            f"Remove {SCRIPT} or use another folder."
        )
    if (folder / DATABASE).exists():
        raise Unsuitable(
            f"{NODE} is gone and {DATABASE} is there, so this folder's node cannot be told. "
            "Keep the folder as it is and enrol this device anew in another folder."
        )
    path = key_path(folder)
    path.parent.mkdir(mode=0o700, exist_ok=True)
    if path.exists():  # the start before this one was cut between key and identity
        path.unlink()
    DeviceKey.generate().save(path)
    # a rehearsal's device shows in its id, so that a real central can refuse it
    dev = ("R-" if scripted else "D-") + "".join(secrets.choice(ALPHABET) for _ in range(6))
    write_private(folder / NODE, {
        "dev": dev, "scripted": scripted, "cookie": f"tw-{secrets.token_hex(4)}",
        "secret": secrets.token_urlsafe(32),
    })  # fmt: skip


def read(folder: Path) -> Identity:
    """Return the node's identity."""
    return Identity(**json.loads((folder / NODE).read_text("utf-8")))


def clock_of(folder: Path) -> Clock:
    """Return the node's clock: the machine's own, or a rehearsal's.

    Raises:
        Unsuitable: ``clock.json`` is there and the node is real, or the other way about.
    """
    scripted, script = read(folder).scripted, (folder / SCRIPT).exists()
    if scripted and not script:
        raise Unsuitable(f"This is a rehearsal's folder and its {SCRIPT} is gone. Rehearse anew.")
    if script and not scripted:
        raise Unsuitable(
            f"{SCRIPT} lies in a real node's folder. Remove it: a real node reads the machine's "
            "own clock."
        )
    return ScriptedClock(folder) if scripted else SystemClock()


def key_path(folder: Path) -> Path:
    """Return where the device key lies."""
    return folder / "keys" / "device.pem"


def key_name(public_key: bytes) -> str:
    """Return the key's id."""
    return key_id(public_key)


def is_rehearsal(dev: str) -> bool:
    """Say whether a device id is that of a rehearsal's node."""
    return dev.startswith("R-")


def central_of(folder: Path) -> dict[str, Any] | None:
    """Return the pinned central, or nothing before enrolment."""
    try:
        pinned: dict[str, Any] = json.loads((folder / CENTRAL).read_text("utf-8"))
    except FileNotFoundError:
        return None
    return pinned


def pin_central(folder: Path, pin: Mapping[str, Any]) -> None:
    """Keep the central's address and key from enrolment on."""
    write_private(folder / CENTRAL, pin)


def write_private(path: Path, value: Mapping[str, Any]) -> None:
    """Write a small file readable by its owner alone, whole or not at all."""
    half = path.with_suffix(".new")
    half.unlink(missing_ok=True)
    number = os.open(half, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    with os.fdopen(number, "w", encoding="utf-8") as file:
        json.dump(value, file, ensure_ascii=False)
        file.flush()
        os.fsync(file.fileno())
    half.replace(path)


def new_act() -> str:
    """Mint the id of an act: UUIDv7, time-ordered, by the machine's clock."""
    return str(uuid_utils.uuid7())
