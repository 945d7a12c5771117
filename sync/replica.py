"""One node's part in replication: what the application hands in, and both sides' steps."""

import sqlite3
from collections.abc import Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Any, Protocol

from sync.entry import Entry, Realm
from sync.keys import DeviceKey, key_id
from sync.shelf import Shelf


@dataclass(frozen=True, slots=True)
class Moment:
    """One reading of the clock: UTC text, offset in minutes, ms that count sleep, id of the boot.

    ``mono`` is None where the machine has no such clock.
    """

    at: str
    off: int
    mono: int | None
    boot: str


@dataclass(frozen=True, slots=True)
class Pin:
    """Central as this device learned it when it was enrolled; nothing else is believed."""

    url: str
    dev: str
    public_key: bytes


class Hooks(Protocol):
    """What replication needs of the application. It knows no kinds but ``log.*`` of its own."""

    @property
    def realm(self) -> Realm:
        """Return the application's name, as bound into signatures."""

    @property
    def key(self) -> DeviceKey:
        """Return this device's key."""

    @property
    def dev(self) -> str:
        """Return this device's id."""

    @property
    def shelf(self) -> Shelf:
        """Return where this node keeps its blobs."""

    def transaction(self) -> AbstractContextManager[sqlite3.Connection]:
        """Open the one write transaction; commit at its end, roll back on any exception."""

    def reading(self) -> AbstractContextManager[sqlite3.Connection]:
        """Lend a connection that sees what is committed and cannot write."""

    def moment(self) -> Moment:
        """Read the clock."""

    def follow(self, db: sqlite3.Connection, entries: Sequence[Entry]) -> None:
        """Bring page tables up to entries that are new to this node, in the same transaction.

        It should take any verified entry: unknown kinds, odd data, any order of arrival. One it
        stumbles over stays in the ledger and is listed in ``unfollowed``.
        """

    def public_key(self, db: sqlite3.Connection, dev: str, key_id: str) -> bytes | None:
        """Return the enrolled key of that id of a device, or None."""

    def grants(self, db: sqlite3.Connection, dev: str) -> frozenset[str]:
        """Return the scopes that a device may pull."""

    def sees_private(self, db: sqlite3.Connection, dev: str) -> bool:
        """Say whether a device may hold private parts of others' entries."""

    def scopes(self, db: sqlite3.Connection) -> list[str]:
        """Return the scopes that this device asks for."""

    def write(
        self,
        db: sqlite3.Connection,
        kind: str,
        data: Mapping[str, Any],
        *,
        refs: Sequence[str] = (),
        blobs: Sequence[Mapping[str, Any]] = (),
    ) -> Entry:
        """Append one own entry to the current log; a carried entry may take 32 KiB."""

    def open_log(self, db: sqlite3.Connection, why: str) -> str:
        """Open a new own log, make it the current one and return its id."""

    def own_logs(self, db: sqlite3.Connection) -> list[str]:
        """Return all logs of this device, open or closed, the current one last."""

    def central(self) -> Pin | None:
        """Return the central this device is enrolled with, or None."""

    def enrol(self, dev: str, public_key: bytes, code: str) -> Mapping[str, Any]:
        """Enrol a device on a one-time code and return what it has to know of this central.

        Raises:
            sync.errors.Refused: The code is unknown, used or too old.
        """


class Replica:
    """A node among others. Each step is a function of this one; ``Hooks`` is all it needs."""

    def __init__(self, hooks: Hooks) -> None:
        self.hooks = hooks
        self.token = ""  # of the present session with central, kept from run to run
        self.checked: dict[str, Any] | None = None  # central's time, not yet written down

    @property
    def realm(self) -> Realm:
        """Return the application's name, as bound into signatures."""
        return self.hooks.realm

    def public_key(self, db: sqlite3.Connection, dev: str, key: str) -> bytes | None:
        """Return the key an entry names if this node knows it: its own, central's, an enrolled."""
        pin = self.hooks.central()
        if dev == self.hooks.dev and key == self.hooks.key.id:
            return self.hooks.key.public
        if pin is not None and dev == pin.dev and key == key_id(pin.public_key):
            return pin.public_key
        return self.hooks.public_key(db, dev, key)
