"""A node's folder on disk: its lock, its one writing connection, its readers, its notes."""

import contextlib
import errno
import os
import shutil
import sqlite3
import threading
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any, Self

from fieldapp import identity
from fieldapp.clock import Clock
from fieldapp.identity import DATABASE
from fieldapp.projections.pages import Pages
from sync import ledger
from sync.entry import Realm
from sync.errors import NotKept, SyncError
from sync.folder import FolderLock, write_anchor
from sync.keys import DeviceKey
from sync.replica import Replica
from sync.shelf import FOLDER as BLOBS
from sync.shelf import Shelf

REALM = Realm("tapwitness")
BALLAST = "ballast"
BALLAST_BYTES = 8 * 1024 * 1024
DISK_FAILED = (
    "The disk failed while saving. The last press was not saved. Stop the program, start it "
    "again, and look at what stands."
)


class RecordStopped(SyncError):
    """The disk failed under a commit; nothing more is written until the node starts again."""


class Disk:
    """One folder held by this process; the only place where a transaction begins or ends."""

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

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

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

    def mark_invite(self, code_hash: str, dev: str) -> None:
        """Mark a one-time code used, in the transaction of the enrolment."""
        self._db.execute("UPDATE invite SET used_by = ? WHERE code_hash = ?", (dev, code_hash))


def _disk_failed(fault: BaseException) -> bool:
    """Say whether the disk gave other bytes than it took, or none: then nothing more is written."""
    if isinstance(fault, NotKept):
        return True
    code = getattr(fault, "sqlite_errorcode", 0) & 0xFF
    return isinstance(fault, sqlite3.Error) and code in _DISK_CODES


_DISK_CODES = (sqlite3.SQLITE_IOERR, sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB)
