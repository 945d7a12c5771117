"""Opening a node: make it, look at the file and the log's end, see a restored copy."""

import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Self

from fieldapp import identity, projections
from fieldapp.clock import Clock
from fieldapp.store.disk import REALM
from fieldapp.store.shared import Shared
from sync import ledger
from sync.entry import Entry, verify
from sync.errors import Unsuitable
from sync.folder import FolderLock, check_place, read_anchors
from sync.follow import ODD_DATA
from sync.follow import follow as follow_with_care

APPLICATION_ID = int.from_bytes(b"TapW")
"""Written into the database's header, so that a stray file can be told (sync.md B4)."""
CHECKED_AT_START = 1000
"""Entries of the own log verified at each start (sync.md B4)."""
DAMAGED = (
    "The database file is damaged. Keep the folder as it is, run 'tapwitness verify', and enrol "
    "this device anew in another folder."
)

_LOCAL_TABLES = """
CREATE TABLE IF NOT EXISTS here (name TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE IF NOT EXISTS own_log (log TEXT PRIMARY KEY, current INTEGER NOT NULL) STRICT;
CREATE TABLE IF NOT EXISTS invite (
  code_hash TEXT PRIMARY KEY, person TEXT NOT NULL, places TEXT NOT NULL,
  expires_at TEXT NOT NULL, used_by TEXT NOT NULL DEFAULT '') STRICT;
"""


class Starting(Shared):
    """What happens once, before the first press; and page tables made anew."""

    @classmethod
    def open(cls, folder: Path, clock: Clock | None = None, *, scripted: bool = False) -> Self:
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

    def rebuild(self) -> int:
        """Make all page tables anew from the record; returns how many entries were read."""
        with self.transaction() as db:
            return self._rebuild(db)
