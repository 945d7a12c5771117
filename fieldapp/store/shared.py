"""What ``sync`` asks of this node: the hooks of ``sync.replica``."""

import json
import sqlite3
from collections.abc import Mapping, Sequence
from typing import Any

from fieldapp import identity, projections
from fieldapp.domain.timetext import format_utc as text
from fieldapp.store.disk import REALM
from fieldapp.store.logs import Logs
from sync import ledger
from sync.adopt import carried
from sync.entry import CARRIED, Entry, b64, unb64, verify
from sync.errors import BadEntry, Refused
from sync.replica import Moment, Pin, Replica


class Shared(Logs):
    """Follows what was verified, knows keys and grants, and says who central is."""

    def moment(self) -> Moment:
        """Return this node's time as sync writes it."""
        now = self.clock.read()
        return Moment(text(now.at), now.off, now.mono, now.boot)

    def follow(self, db: sqlite3.Connection, entries: Sequence[Entry]) -> None:
        """Bring the page tables after entries that were verified and kept.

        Of a carried entry the one inside counts, if its own author's signature holds.
        """
        projections.follow(db, entries)
        kinds = {entry.fields()["kind"] for entry in entries}
        if "device.enrolled" in kinds:  # its author may be one whose carried entries came before
            self._unwrap(db)
        elif CARRIED in kinds:
            self._unwrap(db, [b64(e.hash) for e in entries if e.fields()["kind"] == CARRIED])

    def _unwrap(self, db: sqlite3.Connection, names: Sequence[str] | None = None) -> None:
        """Let page tables follow what those carried entries hold; all carried ones by default."""
        if names is None:
            rows = db.execute("SELECT hash FROM p_fact WHERE kind = ?", (CARRIED,)).fetchall()
            names = [row[0] for row in rows]
        found = (ledger.find(db, unb64(name)) for name in names)
        inner = (self._inner(db, entry) for entry in found if entry is not None)
        projections.follow(db, [entry for entry in inner if entry is not None])

    def _inner(self, db: sqlite3.Connection, entry: Entry) -> Entry | None:
        """Return the entry that a carried one holds, where its own author's signature is good."""
        try:
            inner = carried(REALM, entry.fields())
            said = inner.fields()
            public = self.public_key(db, str(said["dev"]), str(said["key"]))
            if public is None:
                return None
            verify(REALM, inner, public)
        except (BadEntry, KeyError, ValueError):
            return None
        return inner

    def public_key(self, db: sqlite3.Connection, dev: str, key_id: str) -> bytes | None:
        """Return the enrolled public key of a device, this one's and central's included."""
        if (dev, key_id) == (self.dev, self.key.id):
            return self.key.public
        pin = self.central()
        if pin is not None and (dev, key_id) == (pin.dev, identity.key_name(pin.public_key)):
            return pin.public_key
        row = db.execute(
            "SELECT public_key FROM p_device WHERE dev = ? AND key = ?", (dev, key_id)
        ).fetchone()
        return unb64(row[0]) if row else None

    def grants(self, db: sqlite3.Connection, dev: str) -> frozenset[str]:
        """Return the scopes a device may pull: every enrolled one is granted ``all``."""
        rows = db.execute("SELECT scope FROM p_grant WHERE dev = ?", (dev,))
        enrolled = db.execute("SELECT 1 FROM p_device WHERE dev = ?", (dev,)).fetchone()
        return frozenset({row[0] for row in rows} | ({"all"} if enrolled else set()))

    def sees_private(self, db: sqlite3.Connection, dev: str) -> bool:
        """Say whether a device may hold residents' private parts: never a Bench-only one (R6)."""
        row = db.execute("SELECT places FROM p_device WHERE dev = ?", (dev,)).fetchone()
        return row is not None and bool({"kitchen", "desk"} & set(json.loads(row[0])))

    def scopes(self, db: sqlite3.Connection) -> list[str]:
        """Return the scopes this device asks central for."""
        rows = db.execute("SELECT scope FROM p_grant WHERE dev = ? ORDER BY scope", (self.dev,))
        return ["all", *(row[0] for row in rows if row[0] != "all")]

    def central(self) -> Pin | None:
        """Return the central this device is enrolled at, with the key pinned then."""
        pinned = identity.central_of(self.folder)
        return Pin(pinned["url"], pinned["dev"], unb64(pinned["public_key"])) if pinned else None

    def enrol(self, dev: str, public_key: bytes, code: str) -> Mapping[str, Any]:
        """Enrol a device by a one-time code, where this node is a central."""
        if self.enrolling is None:
            raise Refused("not-central", "This node enrols no devices. Ask for central's address.")
        return self.enrolling(dev, public_key, code)

    def replica(self) -> Replica:
        """Return this node's part in replication; its session lasts as long as the node."""
        if self._replica is None:
            self._replica = Replica(self)
        return self._replica
