"""The one opener of transactions of a node: ``act()`` records a press, ``follow()`` brings pages.

A fact becomes an entry of this node's log, the page tables follow, the row is read back and hashed
again, and COMMIT is on disk before anybody is answered (design 3). The store hands ``sync`` the
hooks it needs and knows nothing of HTTP.
"""

import contextlib
import errno
import hashlib
import json
import os
import shutil
import sqlite3
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fieldapp import identity, projections
from fieldapp.clock import Clock
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import KINDS, Fact, LogOpened
from fieldapp.domain.recorded import Reading
from fieldapp.identity import DATABASE
from fieldapp.projections.pages import Pages
from fieldapp.projections.summaries import text
from fieldapp.schemas.facts import check_fact
from fieldapp.scopes import scope_of
from sync import blobs, ledger
from sync.adopt import carried
from sync.entry import (
    CARRIED,
    Entry,
    Realm,
    b64,
    compose,
    conceal,
    new_log_id,
    unb64,
    verify,
)
from sync.errors import BadEntry, NotKept, Refused, SyncError, Unsuitable
from sync.folder import FolderLock, check_place, read_anchors, write_anchor
from sync.follow import ODD_DATA
from sync.follow import follow as follow_with_care
from sync.keys import DeviceKey
from sync.replica import Moment, Pin, Replica
from sync.shelf import FOLDER as BLOBS
from sync.shelf import Shelf

REALM = Realm("tapwitness")
MOST_BYTES = {"protocol.kept": 24 * 1024, "log.carried": 32 * 1024}
BALLAST = "ballast"
BALLAST_BYTES = 8 * 1024 * 1024
APPLICATION_ID = int.from_bytes(b"TapW")
"""Written into the database's header, so that a stray file can be told (sync.md B4)."""
CHECKED_AT_START = 1000
"""Entries of the own log verified at each start (sync.md B4)."""

DAMAGED = (
    "The database file is damaged. Keep the folder as it is, run 'tapwitness verify', and enrol "
    "this device anew in another folder."
)
DISK_FAILED = (
    "The disk failed while saving. The last press was not saved. Stop the program, start it "
    "again, and look at what stands."
)

_LOCAL_TABLES = """
CREATE TABLE IF NOT EXISTS here (name TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE IF NOT EXISTS own_log (log TEXT PRIMARY KEY, current INTEGER NOT NULL) STRICT;
CREATE TABLE IF NOT EXISTS invite (
  code_hash TEXT PRIMARY KEY, person TEXT NOT NULL, places TEXT NOT NULL,
  expires_at TEXT NOT NULL, used_by TEXT NOT NULL DEFAULT '') STRICT;
"""


class ActDiffers(RuleBroken):
    """The act was recorded with other fields, at ``at``; ``answer`` is what it became."""

    kind = "act-differs"


class RecordStopped(SyncError):
    """The disk failed under a commit; nothing more is written until the node starts again."""


@dataclass(frozen=True)
class Answer:
    """The outcome of an act; ``again`` when it was recorded before."""

    answer: Mapping[str, Any]
    entries: tuple[str, ...]
    again: bool


Decide = Callable[[Pages, Reading], "Sequence[Fact] | Decision"]


class Store:
    """One node's record in one folder: its lock, its key, its one writing connection."""

    realm = REALM

    def __init__(self, folder: Path, clock: Clock, *, keep_lock: FolderLock) -> None:
        self.folder, self.clock = folder, clock
        self._lock_file = keep_lock
        self._writing = threading.RLock()
        self._readers = threading.local()
        self._open_readers: list[tuple[threading.Thread, sqlite3.Connection]] = []
        self._lending = threading.Lock()
        self._stopped = ""
        self._replica: Replica | None = None
        self.sending = threading.Lock()  # one run of exchanges at a time
        self.enrolling: Callable[[str, bytes, str], Mapping[str, Any]] | None = None
        self._in_transaction = False
        self._touched: set[str] = set()
        self.shelf = Shelf(folder / BLOBS)
        self.identity = identity.read(folder)
        self.dev = self.identity.dev
        self.key = DeviceKey.load(identity.key_path(folder))
        self._db = sqlite3.connect(folder / DATABASE, isolation_level=None, check_same_thread=False)

    # opening and closing

    @classmethod
    def open(cls, folder: Path, clock: Clock | None = None, *, scripted: bool = False) -> "Store":
        """Open the node in a folder; in an empty one make it first.

        Args:
            folder: The node's data folder.
            clock: A clock object, only in tests; else the folder's own.
            scripted: Make a rehearsal's node, whose clock reads ``clock.json``.

        Raises:
            FolderHeld: Another process runs this folder's node.
            Unsuitable: The place, the schema or the clock file is not what it must be.
        """
        folder.mkdir(parents=True, exist_ok=True)
        check_place(folder)
        lock = FolderLock(folder)
        lock.acquire()
        try:
            fresh = not identity.exists(folder)
            if fresh:
                identity.make(folder, scripted=scripted)
            store = cls(folder, clock or identity.clock_of(folder), keep_lock=lock)
        except BaseException:
            lock.release()
            raise
        try:
            store._prepare()
        except BaseException:
            store.close()
            raise
        return store

    def close(self) -> None:
        """Checkpoint, close every connection and give the folder back; no ``-wal`` stays."""
        with self._writing:
            for _, reader in self._open_readers:
                with contextlib.suppress(sqlite3.Error):
                    reader.close()
            with contextlib.suppress(sqlite3.Error):
                self._db.execute("PRAGMA wal_checkpoint(TRUNCATE)")
            self._db.close()
        self._lock_file.release()

    def __enter__(self) -> "Store":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _prepare(self) -> None:
        """Make what is missing, look at the file and the log's end, and see a restored copy."""
        try:
            ledger.prepare(self._db)
            if self._db.execute("PRAGMA quick_check").fetchone()[0] != "ok":
                raise Unsuitable(DAMAGED)
        except sqlite3.OperationalError:
            raise
        except sqlite3.DatabaseError as fault:
            raise Unsuitable(DAMAGED) from fault
        with self.transaction() as db:
            for statement in filter(str.strip, _LOCAL_TABLES.split(";")):
                db.execute(statement)
            ledger.make_tables(db)
            db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            stale = self.get("page_tables") != str(projections.VERSION)
            if stale:
                self._rebuild(db)
                self.put("page_tables", str(projections.VERSION))
            if not self.own_logs(db):
                self.open_log(db, "first")
            elif self._behind_anchor(db):
                self.open_log(db, "restored")
        self._check_tail()
        self.shelf.sweep()
        self._keep_ballast()

    def _behind_anchor(self, db: sqlite3.Connection) -> bool:
        """Say whether the database is older than its anchors: it was restored (sync.md B7).

        The log that went on may be one this copy has never heard of. An anchor that a log was
        opened for once does not open another at every start.
        """
        own, current = self.own_logs(db), self.current_log(db)
        behind = {
            f"{log}:{anchor.seq}"
            for log, anchor in read_anchors(self.folder).items()
            if (log == current or log not in own)
            and ledger.hash_at(db, log, anchor.seq) != anchor.hash
        }
        known = set(self.get("behind").split())
        self.put("behind", " ".join(sorted(behind | known)))
        return bool(behind - known)

    def _check_tail(self) -> None:
        with self.reader() as db:
            log = self.current_log(db)
            head = ledger.head(db, log)
            first = max(1, (head.seq if head else 1) - CHECKED_AT_START + 1)
            while entries := ledger.read(db, log, first, 500):
                for entry in entries:
                    verify(REALM, entry, self.key.public)
                first = entries[-1].seq + 1

    def _all_entries(self, db: sqlite3.Connection) -> Iterator[Entry]:
        """Return all entries that page tables follow; of a branch those that central named."""
        for table in ("entry", "borrowed", "branch"):
            stated = " AND stated > 0" if table == "branch" else ""
            last = ("", 0, b"")
            while rows := db.execute(
                f"SELECT log, seq, hash, body, sig FROM {table} WHERE (log, seq, hash) > (?, ?, ?)"
                f"{stated} ORDER BY log, seq, hash LIMIT 500",
                last,
            ).fetchall():
                for log, seq, digest, body, sig in rows:
                    yield Entry(log, seq, bytes(digest), bytes(body), bytes(sig))
                last = rows[-1][:3]

    def _rebuild(self, db: sqlite3.Connection) -> int:
        """Make the page tables anew; an entry that hurts them is listed and holds up nothing."""
        db.execute("DELETE FROM unfollowed")
        db.execute("SAVEPOINT rebuilding")
        try:
            read = projections.rebuild(db, self._all_entries(db))
            self._unwrap(db)
        except ODD_DATA:
            db.execute("ROLLBACK TO rebuilding")
            read = projections.rebuild(db, iter(()))
            for entry in self._all_entries(db):
                follow_with_care(self.replica(), db, [entry])
                read += 1
        db.execute("RELEASE rebuilding")
        return read

    def _keep_ballast(self) -> None:
        """Lay the ballast where there is room for it twice; the last free bytes are the record's.

        Random bytes, for some file systems keep zeros in no room at all.
        """
        ballast = self.folder / BALLAST
        if ballast.exists() or shutil.disk_usage(self.folder).free < 2 * BALLAST_BYTES:
            return
        try:
            ballast.write_bytes(os.urandom(BALLAST_BYTES))
        except OSError:
            ballast.unlink(missing_ok=True)

    # transactions

    @contextlib.contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """Hold the one write lock around ``BEGIN IMMEDIATE`` … ``COMMIT``; then write the anchors.

        Any exception rolls back and leaves nothing.
        """
        with self._writing:
            if self._stopped:
                raise RecordStopped(self._stopped)
            if self._in_transaction:
                raise RuntimeError("a transaction is open already on this thread")
            self._in_transaction, self._touched = True, set()
            try:
                self._db.execute("BEGIN IMMEDIATE")
                yield self._db
                self._commit()
            except BaseException as fault:
                # SQLITE_FULL has rolled back already; then there is nothing to undo
                with contextlib.suppress(sqlite3.OperationalError):
                    self._db.execute("ROLLBACK")
                if _disk_failed(fault):
                    self._stopped = DISK_FAILED
                    raise RecordStopped(DISK_FAILED) from fault
                raise
            finally:
                self._in_transaction = False
            self._anchor()

    def _commit(self) -> None:
        self._db.execute("COMMIT")

    def _anchor(self) -> None:
        for log in self._touched:
            head = ledger.head(self._db, log)
            if head is not None:
                try:
                    write_anchor(self.folder, log, head)
                except OSError as fault:
                    # The press is on disk; an anchor may lag behind and is written with the next
                    if fault.errno not in (errno.ENOSPC, errno.EDQUOT):
                        raise

    @contextlib.contextmanager
    def reader(self) -> Iterator[sqlite3.Connection]:
        """Lend this thread's read-only connection, in one read transaction."""
        db = getattr(self._readers, "db", None)
        if db is None:
            uri = (self.folder / DATABASE).resolve().as_uri() + "?mode=ro"
            db = sqlite3.connect(uri, uri=True, isolation_level=None, check_same_thread=False)
            ledger.prepare(db, reader=True)
            self._readers.db = db
            self._keep_reader(db)
        if db.in_transaction:
            yield db
            return
        db.execute("BEGIN")
        try:
            yield db
        finally:
            db.execute("ROLLBACK")

    reading = reader

    def _keep_reader(self, db: sqlite3.Connection) -> None:
        """Remember this thread's reader and close those whose threads have ended."""
        with self._lending:
            ended = [one for thread, one in self._open_readers if not thread.is_alive()]
            self._open_readers = [pair for pair in self._open_readers if pair[0].is_alive()]
            self._open_readers.append((threading.current_thread(), db))
        for one in ended:
            one.close()

    @contextlib.contextmanager
    def pages(self) -> Iterator[Pages]:
        """Lend the page tables for reading."""
        with self.reader() as db:
            yield Pages(db)

    # acts

    def act(
        self, act: str, fields: Mapping[str, Any], decide: Decide, *, by: str, auth: str = "none"
    ) -> Answer:
        """Record one press, once.

        Args:
            act: The id minted when the page was drawn (UUIDv7).
            fields: What the form sent; the same act with other fields is another press.
            decide: Reads the pages inside the transaction and returns the facts, or raises.
            by: The person.
            auth: How the person was shown: ``none`` until there are log-ins.

        Raises:
            ActDiffers: The act stands with other fields.
            RuleBroken: A rule stands against it; nothing was recorded.
        """
        mark = _mark(fields)
        try:
            return self._act(act, mark, decide, by, auth)
        except sqlite3.OperationalError as fault:
            if "full" not in str(fault) or not (self.folder / BALLAST).exists():
                raise
            # The disk is full: give up the ballast and save this one press (sync.md B4)
            (self.folder / BALLAST).unlink()
            return self._act(act, mark, decide, by, auth)

    def _act(self, act: str, mark: str, decide: Decide, by: str, auth: str) -> Answer:
        with self.transaction() as db:
            known = db.execute(
                "SELECT fields_hash, log, first_seq, n, answer FROM act WHERE id = ?", (act,)
            ).fetchone()
            if known is not None:
                return self._again(db, mark, known)
            moment = self.clock.read()
            decided = decide(Pages(db), moment)
            decision = decided if isinstance(decided, Decision) else Decision(decided)
            entries = self._append_all(db, decision.facts, by, auth, act, moment)
            first = entries[0].seq if entries else 0
            answer = json.dumps(
                {"at": text(moment.at), "answer": dict(decision.answer)}, ensure_ascii=False
            )
            db.execute(
                "INSERT INTO act (id, fields_hash, log, first_seq, n, answer)"
                " VALUES (?, ?, ?, ?, ?, ?)",
                (act, mark, self.current_log(db), first, len(entries), answer),
            )
            return Answer(decision.answer, tuple(b64(e.hash) for e in entries), again=False)

    def _again(self, db: sqlite3.Connection, mark: str, known: Sequence[Any]) -> Answer:
        fields_hash, log, first, n, written = known
        kept = json.loads(written)
        if fields_hash != mark:
            raise ActDiffers(at=kept["at"], answer=kept["answer"])
        rows = db.execute(
            "SELECT hash FROM entry WHERE log = ? AND seq >= ? AND seq < ? ORDER BY seq",
            (log, first, first + n),
        )
        return Answer(kept["answer"], tuple(b64(bytes(row[0])) for row in rows), again=True)

    def _append_all(
        self,
        db: sqlite3.Connection,
        facts: Sequence[Fact],
        by: str,
        auth: str,
        act: str,
        moment: Reading,
    ) -> list[Entry]:
        entries, dirty = [], set()
        for given in facts:
            check_fact(given)
            entry = self._append(db, given, by=by, auth=auth, act=act, moment=moment)
            entries.append(entry)
            told = projections.take(db, b64(entry.hash), entry.fields())
            # the scope of what follows in this act hangs on these
            if given.kind in ("round.opened", "round.changed", "route.planned", "visit.planned"):
                projections.refresh(db, told)
            dirty |= told
        projections.refresh(db, dirty)
        return entries

    def _append(
        self,
        db: sqlite3.Connection,
        given: Fact,
        *,
        by: str,
        auth: str,
        act: str,
        moment: Reading,
        refs: Sequence[str] = (),
        blobs: Sequence[Mapping[str, Any]] = (),
    ) -> Entry:
        """Build, sign and insert one entry at the end of the current log; it is read back there."""
        log = self.current_log(db)
        head = ledger.head(db, log)
        names = [str(getattr(given, "of", "")), *refs]
        hidden = given.private_part()
        private = conceal(hidden)[0] if hidden else None
        fields = {
            "log": log, "seq": head.seq + 1 if head else 1, "prev": b64(head.hash) if head else "",
            "dev": self.dev, "kind": given.kind, "id": act, "at": text(moment.at),
            "off": moment.off, "mono": moment.mono, "boot": moment.boot, "by": by, "auth": auth,
            "scope": scope_of(Pages(db), given), "refs": [n for n in names if n],
            "blobs": [*given.blobs(), *(dict(one) for one in blobs)], "data": given.data(),
        }  # fmt: skip
        if central_time := self.get("ct"):
            fields["ct"] = json.loads(central_time)
        limit = MOST_BYTES.get(given.kind, 8 * 1024)
        entry = compose(REALM, self.key, fields, private=private, limit=limit)
        ledger.add(db, entry, at=text(moment.at), frm="", realm=REALM)
        self._touched.add(log)
        return entry

    # what sync asks of this node (sync.replica.Hooks)

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

    def own_logs(self, db: sqlite3.Connection) -> list[str]:
        """Return every log this node wrote, closed ones too."""
        return [row[0] for row in db.execute("SELECT log FROM own_log ORDER BY rowid")]

    def current_log(self, db: sqlite3.Connection) -> str:
        """Return the log this node writes now."""
        row = db.execute("SELECT log FROM own_log WHERE current = 1").fetchone()
        return str(row[0]) if row else ""

    def open_log(self, db: sqlite3.Connection, why: str) -> str:
        """Open a new log of this node, tied to the one before, and write there from now on."""
        before = self.current_log(db)
        head = ledger.head(db, before) if before else None
        log = new_log_id()
        db.execute("UPDATE own_log SET current = 0")
        db.execute("INSERT INTO own_log (log, current) VALUES (?, 1)", (log,))
        opened = LogOpened(
            public_key=b64(self.key.public),
            why=why,
            clock="scripted" if self.clock.scripted else "",
            prev_log=before,
            prev_head=b64(head.hash) if head else "",
        )
        entry = self._append(
            db, opened, by="", auth="none", act=identity.new_act(), moment=self.clock.read()
        )
        projections.follow(db, [entry])
        return log

    def write(
        self,
        db: sqlite3.Connection,
        kind: str,
        data: Mapping[str, Any],
        *,
        refs: Sequence[str] = (),
        blobs: Sequence[Mapping[str, Any]] = (),
    ) -> Entry:
        """Append one entry of the program's own to the current log (sync's carried ones)."""
        given = KINDS[kind].read(data)
        entry = self._append(
            db, given, by="", auth="none", act=identity.new_act(), moment=self.clock.read(),
            refs=refs, blobs=blobs,
        )  # fmt: skip
        projections.follow(db, [entry])
        return entry

    def central(self) -> Pin | None:
        """Return the central this device is enrolled at, with the key pinned then."""
        pinned = identity.central_of(self.folder)
        return Pin(pinned["url"], pinned["dev"], unb64(pinned["public_key"])) if pinned else None

    def enrol(self, dev: str, public_key: bytes, code: str) -> Mapping[str, Any]:
        """Enrol a device by a one-time code, where this node is a central."""
        if self.enrolling is None:
            raise Refused("not-central", "This node enrols no devices. Ask for central's address.")
        return self.enrolling(dev, public_key, code)

    def rebuild(self) -> int:
        """Make all page tables anew from the record; returns how many entries were read."""
        with self.transaction() as db:
            return self._rebuild(db)

    def replica(self) -> Replica:
        """Return this node's part in replication; its session lasts as long as the node."""
        if self._replica is None:
            self._replica = Replica(self)
        return self._replica

    # small things a node keeps for itself

    def mark_invite(self, code_hash: str, dev: str) -> None:
        """Mark a one-time code used, in the transaction of the enrolment."""
        self._db.execute("UPDATE invite SET used_by = ? WHERE code_hash = ?", (dev, code_hash))

    def get(self, name: str) -> str:
        """Return one of this node's own notes, empty where there is none."""
        try:
            row = self._db.execute("SELECT value FROM here WHERE name = ?", (name,)).fetchone()
        except sqlite3.OperationalError:
            return ""
        return str(row[0]) if row else ""

    def put(self, name: str, value: str) -> None:
        """Keep a note; inside a transaction it is part of it."""
        self._db.execute(
            "INSERT INTO here (name, value) VALUES (?, ?)"
            " ON CONFLICT (name) DO UPDATE SET value = excluded.value",
            (name, value),
        )

    def waiting(self) -> int:
        """Return how many own entries central has not acknowledged."""
        with self.reader() as db:
            return sum(self._waiting(db, log) for log in self.own_logs(db))

    def photos_waiting(self) -> dict[str, int]:
        """Return the photos that central did not say it holds, each with its bytes."""
        with self.reader() as db:
            return blobs.waiting(db, self.own_logs(db))

    def names_blob(self, sha256: str) -> str:
        """Return the media type by which an entry here names that file, empty where none does."""
        with self.reader() as db:
            row = db.execute("SELECT t FROM blob WHERE h = ? LIMIT 1", (sha256,)).fetchone()
        return str(row[0]) if row else ""

    def acknowledged_at(self) -> str | None:
        """Return when central signed that it holds the current log, by central's clock."""
        with self.reader() as db:
            known = ledger.acknowledged(db, self.current_log(db))
        return known.at if known else None

    def _waiting(self, db: sqlite3.Connection, log: str) -> int:
        head, known = ledger.head(db, log), ledger.acknowledged(db, log)
        return (head.seq if head else 0) - (known.seq if known else 0)


def _disk_failed(fault: BaseException) -> bool:
    """Say whether the disk gave other bytes than it took, or none: then nothing more is written."""
    if isinstance(fault, NotKept):
        return True
    code = getattr(fault, "sqlite_errorcode", 0) & 0xFF
    return isinstance(fault, sqlite3.Error) and code in _DISK_CODES


_DISK_CODES = (sqlite3.SQLITE_IOERR, sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB)


def _mark(fields: Mapping[str, Any]) -> str:
    text_of = json.dumps(fields, sort_keys=True, ensure_ascii=False, default=str)
    return hashlib.sha256(text_of.encode()).hexdigest()
