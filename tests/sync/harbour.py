"""A node without water: the smallest application that replication can serve, over SQLite.

Its facts are notes. Its page tables are ``page`` (one row a fact, whoever carried it here) and
``followed``, which breaks if replication ever hands over the same entry twice.
"""

import hashlib
import itertools
import sqlite3
import threading
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from sync import ledger
from sync.adopt import carried
from sync.encoding import b64, unb64
from sync.endpoint import Endpoint
from sync.entry import CARRIED, MOST_READ, MOST_WRITTEN, Entry, Realm, compose, conceal
from sync.errors import BadEntry, Refused
from sync.exchange import SyncReport, run
from sync.folder import write_anchor
from sync.keys import DeviceKey, key_id
from sync.ledger import Head
from sync.peer import LoopbackPeer, Peer
from sync.replica import Moment, Pin, Replica
from sync.shelf import FOLDER, Shelf

REALM = Realm("harbour")
START = datetime(2031, 5, 4, 6, 30, tzinfo=UTC)
NOWHERE = Path("/dev/null")  # no folder can be made here: a node without one keeps no blobs
OWN_TABLES = (
    "CREATE TABLE own (n INTEGER PRIMARY KEY, log TEXT NOT NULL)",
    "CREATE TABLE followed (hash BLOB PRIMARY KEY)",
    "CREATE TABLE page (hash BLOB PRIMARY KEY, kind TEXT, text TEXT)",
    "CREATE TABLE enrolled (dev TEXT, key TEXT, public BLOB, PRIMARY KEY (dev, key))",
    "CREATE TABLE granted (dev TEXT, scope TEXT, PRIMARY KEY (dev, scope))",
)


class Node:
    """One node: its key, its database, and what the application says when asked."""

    realm = REALM

    def __init__(self, dev: str, *, folder: Path | None = None, seed: int = 0) -> None:
        self.dev = dev
        self.key = DeviceKey.from_seed(bytes([seed]) * 32) if seed else DeviceKey.generate()
        self.folder = folder
        self.shelf = Shelf((folder or NOWHERE) / FOLDER)
        self.pin: Pin | None = None
        self.asks: list[str] = []
        self.codes: set[str] = set()
        self.blind: set[str] = set()
        self.clock = itertools.count()
        self.ids = itertools.count()  # shared by clones and kept over a restore, as chance is
        self.lock = threading.RLock()
        self.db = self._connect()
        with self.transaction() as db:
            ledger.make_tables(db)
            for statement in OWN_TABLES:
                db.execute(statement)
            self.open_log(db, "first")
        self.replica = Replica(self)

    # -- what replication asks -----------------------------------------------------------

    @contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        with self.lock:
            self.db.execute("BEGIN IMMEDIATE")
            try:
                yield self.db
            except BaseException:
                self.db.execute("ROLLBACK")
                raise
            self.db.execute("COMMIT")
            if self.folder is not None:
                for log in self.own_logs(self.db):
                    row = self.db.execute(
                        "SELECT seq, hash FROM entry WHERE log = ? ORDER BY seq DESC", (log,)
                    ).fetchone()
                    write_anchor(self.folder, log, Head(*row))

    @contextmanager
    def reading(self) -> Iterator[sqlite3.Connection]:
        with self.lock:
            yield self.db

    def moment(self) -> Moment:
        tick = next(self.clock)
        at = (START + timedelta(seconds=tick)).isoformat(timespec="milliseconds")
        return Moment(at.replace("+00:00", "Z"), -360, tick * 1000, "b1")

    def follow(self, db: sqlite3.Connection, entries: Sequence[Entry]) -> None:
        for entry in entries:
            db.execute("INSERT INTO followed VALUES (?)", (entry.hash,))
            fields = entry.fields()
            if fields["kind"] == CARRIED:
                try:
                    entry = carried(REALM, fields)
                except BadEntry:
                    continue
                fields = entry.fields()
            data = fields.get("data")
            row = (entry.hash, fields["kind"], data.get("text") if isinstance(data, dict) else None)
            db.execute("INSERT OR IGNORE INTO page VALUES (?, ?, ?)", row)
            if fields["kind"] == "device.enrolled":
                public = unb64(data["public_key"])
                row = (data["dev"], key_id(public), public)
                db.execute("INSERT OR IGNORE INTO enrolled VALUES (?, ?, ?)", row)
            if fields["kind"] == "device.granted":
                row = (data["dev"], data["scope"])
                db.execute("INSERT OR IGNORE INTO granted VALUES (?, ?)", row)

    def public_key(self, db: sqlite3.Connection, dev: str, key_id: str) -> bytes | None:
        row = db.execute("SELECT public FROM enrolled WHERE dev = ? AND key = ?", (dev, key_id))
        found = row.fetchone()
        return None if found is None else found[0]

    def grants(self, db: sqlite3.Connection, dev: str) -> frozenset[str]:
        rows = db.execute("SELECT scope FROM granted WHERE dev = ?", (dev,))
        return frozenset({"all"} | {scope for (scope,) in rows})

    def sees_private(self, db: sqlite3.Connection, dev: str) -> bool:
        return dev not in self.blind

    def scopes(self, db: sqlite3.Connection) -> list[str]:
        return ["all", *self.asks]

    def write(
        self,
        db: sqlite3.Connection,
        kind: str,
        data: Mapping[str, Any],
        *,
        refs: Sequence[str] = (),
        blobs: Sequence[Mapping[str, Any]] = (),
        scope: Sequence[str] = (),
        private: bytes | None = None,
    ) -> Entry:
        log = self.own_logs(db)[-1]
        given = {"refs": refs, "scope": scope, "private": private, "blobs": blobs}
        return self._append(db, log, kind, data, **given)

    def open_log(self, db: sqlite3.Connection, why: str) -> str:
        log = b64(hashlib.sha256(f"{self.dev} {next(self.ids)}".encode()).digest()[:16])
        db.execute("INSERT INTO own (log) VALUES (?)", (log,))
        self._append(db, log, "log.opened", {"public_key": b64(self.key.public), "why": why})
        return log

    def own_logs(self, db: sqlite3.Connection) -> list[str]:
        return [log for (log,) in db.execute("SELECT log FROM own ORDER BY n")]

    def central(self) -> Pin | None:
        return self.pin

    def enrol(self, dev: str, public_key: bytes, code: str) -> Mapping[str, Any]:
        if code not in self.codes:
            raise Refused("wrong-code", "This code is unknown or used. Ask for a new one.")
        self.codes.discard(code)
        self.vouch(dev, public_key)
        return {"dev": self.dev, "public_key": b64(self.key.public)}

    # -- what a test does with it --------------------------------------------------------

    def note(self, text: str, *scope: str, private: Mapping[str, Any] | None = None) -> bytes:
        """Save one fact and return its hash."""
        # Nothing here is left to chance, so that a history that fails can be told again.
        salt = hashlib.sha256(text.encode()).digest()[:16]
        hidden = None if private is None else conceal(private, salt)[0]
        with self.transaction() as db:
            return self.write(db, "note.made", {"text": text}, scope=scope, private=hidden).hash

    def photograph(self, data: bytes, *scope: str) -> str:
        """Keep a picture, then save the fact that names it; return its name."""
        name = self.shelf.keep(data)
        named = {"h": name, "n": len(data), "t": "image/jpeg"}
        with self.transaction() as db:
            self.write(db, "note.made", {"text": f"photo {name[:8]}"}, scope=scope, blobs=[named])
        return name

    def vouch(self, dev: str, public_key: bytes) -> None:
        """Enrol a device at this central."""
        data = {"dev": dev, "public_key": b64(public_key)}
        with self.transaction() as db:
            self.write(db, "device.enrolled", data, scope=["all"])

    def grant(self, dev: str, scope: str) -> None:
        with self.transaction() as db:
            self.write(db, "device.granted", {"dev": dev, "scope": scope}, scope=["all"])

    def facts(self) -> set[bytes]:
        """Return the hashes of all notes on this node's pages."""
        return {h for (h,) in self.db.execute("SELECT hash FROM page WHERE kind = 'note.made'")}

    def texts(self) -> list[str]:
        rows = self.db.execute("SELECT text FROM page WHERE kind = 'note.made' ORDER BY text")
        return [text for (text,) in rows]

    def bytes_held(self) -> set[bytes]:
        """Return the hashes of all entries held anywhere in this node."""
        query = (
            "SELECT hash FROM entry UNION SELECT hash FROM branch UNION SELECT hash FROM borrowed"
        )
        return {h for (h,) in self.db.execute(query)}

    def snapshot(self) -> bytes:
        """Return a copy of the whole database, as a backup would hold it."""
        return self.db.serialize()

    def restore(self, copy: bytes) -> None:
        """Go back to a copy, not knowing that it is one; the key and the pin stay."""
        self.db.close()
        self.db = self._connect()
        self.db.deserialize(copy)
        ledger.prepare(self.db)
        self.replica = Replica(self)

    def clone(self) -> "Node":
        """Return a second machine started from a copy of this one's disk."""
        twin = object.__new__(Node)
        twin.__dict__.update(self.__dict__)
        twin.lock = threading.RLock()
        twin.db = twin._connect()
        twin.db.deserialize(self.snapshot())
        ledger.prepare(twin.db)
        twin.replica = Replica(twin)
        return twin

    def close(self) -> None:
        self.db.close()

    def _connect(self) -> sqlite3.Connection:
        path = ":memory:" if self.folder is None else str(self.folder / "ledger.db")
        db = sqlite3.connect(path, isolation_level=None, check_same_thread=False)
        ledger.prepare(db)
        return db

    def _append(
        self,
        db: sqlite3.Connection,
        log: str,
        kind: str,
        data: Mapping[str, Any],
        *,
        refs: Sequence[str] = (),
        scope: Sequence[str] = (),
        private: bytes | None = None,
        blobs: Sequence[Mapping[str, Any]] = (),
        raw_blobs: object = None,
    ) -> Entry:
        row = db.execute(
            "SELECT seq, hash FROM entry WHERE log = ? ORDER BY seq DESC LIMIT 1", (log,)
        ).fetchone()
        seq, prev = (0, b"") if row is None else row
        moment = self.moment()
        fields = {
            "log": log,
            "seq": seq + 1,
            "prev": b64(prev),
            "dev": self.dev,
            "kind": kind,
            "at": moment.at,
            "mono": moment.mono,
            "boot": moment.boot,
            "refs": list(refs),
            "scope": list(scope),
            **({"blobs": raw_blobs or [dict(one) for one in blobs]} if blobs or raw_blobs else {}),
            "data": dict(data),
        }
        limit = MOST_READ if kind == CARRIED else MOST_WRITTEN
        entry = compose(REALM, self.key, fields, private=private, limit=limit)
        ledger.add(db, entry, at=moment.at, frm=self.dev, realm=REALM)
        self.follow(db, [entry])
        return entry


class Harbour:
    """One central and its devices, joined by loopback unless a test hands in another peer."""

    def __init__(self) -> None:
        self.central = Node("C-01", seed=200)
        self.endpoint = Endpoint(self.central.replica)

    def device(self, dev: str, *scopes: str, seed: int = 0) -> Node:
        """Return a newly enrolled device that is granted, and asks for, these scopes."""
        node = Node(dev, seed=seed)
        node.pin = Pin("https://central.example", self.central.dev, self.central.key.public)
        self.central.vouch(dev, node.key.public)
        for scope in scopes:
            self.central.grant(dev, scope)
        node.asks = list(scopes)
        return node

    def peer(self) -> Peer:
        return LoopbackPeer(self.endpoint, REALM)

    def sync(self, node: Node, peer: Peer | None = None) -> SyncReport:
        return run(node.replica, peer or self.peer())

    def drain(self, *nodes: Node, runs: int = 3) -> None:
        """Let every device sync until nothing of it waits."""
        for node in nodes:
            for _ in range(runs):
                report = self.sync(node)
            assert report.waiting == 0, f"{node.dev} still has {report.waiting} waiting"

    def restore_central(self, copy: bytes) -> None:
        """Central goes back to a copy; its sessions end with its process."""
        self.central.restore(copy)
        self.endpoint = Endpoint(self.central.replica)
