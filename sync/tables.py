"""The tables of the record and the settings under which SQLite keeps them."""

import sqlite3

from sync.errors import Unsuitable

SCHEMA_VERSION = 1
WAL_BYTES = 16 * 1024 * 1024  # the write-ahead log is cut back to this after a checkpoint
BUSY_MS = 5000
CHECKPOINT_PAGES = 1000

# What every connection needs. Without recursive_triggers an INSERT OR REPLACE slips past the
# guards: the delete it makes fires no trigger.
EVERYWHERE = (
    f"PRAGMA busy_timeout = {BUSY_MS}",
    "PRAGMA mmap_size = 0",
    "PRAGMA foreign_keys = ON",
    "PRAGMA recursive_triggers = ON",
    "PRAGMA cell_size_check = ON",
    "PRAGMA trusted_schema = OFF",
)
# FULL, not NORMAL: in WAL mode NORMAL loses facts that were already answered for when the
# power fails (SQLite, "PRAGMA synchronous").
WRITING = (
    "PRAGMA journal_mode = WAL",
    "PRAGMA synchronous = FULL",
    "PRAGMA fullfsync = ON",
    "PRAGMA checkpoint_fullfsync = ON",
    f"PRAGMA wal_autocheckpoint = {CHECKPOINT_PAGES}",
    f"PRAGMA journal_size_limit = {WAL_BYTES}",
)

TABLES = (
    # Whole logs this node answers for: its own, at central those of all. Gapless, guarded.
    """CREATE TABLE IF NOT EXISTS entry (
        log TEXT NOT NULL, seq INTEGER NOT NULL CHECK (seq > 0), hash BLOB NOT NULL UNIQUE,
        body BLOB NOT NULL, sig BLOB NOT NULL, recv_at TEXT NOT NULL, recv_from TEXT NOT NULL,
        PRIMARY KEY (log, seq)) STRICT""",
    # The other side of a fork. stated = 0: kept as evidence. stated = n: the n-th history
    # that central named for this log; from its first seq on, heads are stated by it.
    """CREATE TABLE IF NOT EXISTS branch (
        log TEXT NOT NULL, seq INTEGER NOT NULL CHECK (seq > 0), hash BLOB NOT NULL,
        body BLOB NOT NULL, sig BLOB NOT NULL, recv_at TEXT NOT NULL, recv_from TEXT NOT NULL,
        stated INTEGER NOT NULL CHECK (stated >= 0),
        PRIMARY KEY (log, stated, seq, hash)) STRICT""",
    "CREATE INDEX IF NOT EXISTS branch_hash ON branch (hash)",
    # Single entries pulled by scope: gaps allowed, each verified alone.
    """CREATE TABLE IF NOT EXISTS borrowed (
        log TEXT NOT NULL, seq INTEGER NOT NULL CHECK (seq > 0), hash BLOB PRIMARY KEY,
        body BLOB NOT NULL, sig BLOB NOT NULL, recv_at TEXT NOT NULL, recv_from TEXT NOT NULL
        ) STRICT""",
    "CREATE INDEX IF NOT EXISTS borrowed_place ON borrowed (log, seq)",
    # Private parts by their SHA-256; only these may be purged.
    """CREATE TABLE IF NOT EXISTS private (
        h BLOB PRIMARY KEY, p BLOB NOT NULL) STRICT""",
    # Presses: the id minted with the page, what was sent, and what it became.
    """CREATE TABLE IF NOT EXISTS act (
        id TEXT PRIMARY KEY, fields_hash ANY NOT NULL, log TEXT NOT NULL DEFAULT '',
        first_seq INTEGER, n INTEGER NOT NULL DEFAULT 0, answer ANY) STRICT""",
    """CREATE TABLE IF NOT EXISTS acknowledgement (
        log TEXT PRIMARY KEY, seq INTEGER NOT NULL, hash BLOB NOT NULL, at TEXT NOT NULL,
        key TEXT NOT NULL, sig BLOB NOT NULL) STRICT""",
    # By which scopes an entry is pulled; of borrowed ones, by which it was.
    """CREATE TABLE IF NOT EXISTS entry_scope (
        scope TEXT NOT NULL, log TEXT NOT NULL, seq INTEGER NOT NULL, hash BLOB NOT NULL,
        PRIMARY KEY (scope, log, seq, hash)) STRICT, WITHOUT ROWID""",
    # Which entry carried one over that stands in a history central does not name.
    """CREATE TABLE IF NOT EXISTS carriage (
        hash BLOB PRIMARY KEY, parcel BLOB NOT NULL) STRICT, WITHOUT ROWID""",
    # Which blobs the entries held here name; a blob is taken from nobody unless one does.
    """CREATE TABLE IF NOT EXISTS blob (
        h TEXT NOT NULL, hash BLOB NOT NULL, log TEXT NOT NULL, seq INTEGER NOT NULL,
        n INTEGER NOT NULL, t TEXT NOT NULL, PRIMARY KEY (h, hash)) STRICT, WITHOUT ROWID""",
    "CREATE INDEX IF NOT EXISTS blob_log ON blob (log)",
    # Which blobs central said it holds whole; a guess of what need not be sent, no more.
    """CREATE TABLE IF NOT EXISTS blob_received (h TEXT PRIMARY KEY) STRICT, WITHOUT ROWID""",
    # Entries kept here that page tables could not take; a person's list, emptied by a rebuild.
    """CREATE TABLE IF NOT EXISTS unfollowed (
        hash BLOB PRIMARY KEY, log TEXT NOT NULL, seq INTEGER NOT NULL, says TEXT NOT NULL
        ) STRICT""",
    "CREATE INDEX IF NOT EXISTS entry_scope_hash ON entry_scope (hash)",
)
GUARDED = ("entry", "branch")


def prepare(db: sqlite3.Connection, *, reader: bool = False) -> None:
    """Set the pragmas of one connection, before its first transaction.

    A reader gets only what guards it; how the file is written is the writer's to say.

    Raises:
        Unsuitable: The file system does not let SQLite keep a write-ahead log.
    """
    for pragma in EVERYWHERE if reader else (*WRITING, *EVERYWHERE):
        answer = db.execute(pragma).fetchone()
        if "journal_mode" in pragma and answer[0].lower() not in ("wal", "memory"):
            raise Unsuitable(
                f"This file system keeps no write-ahead log (SQLite says {answer[0]}). "
                "Put the data folder on a disk of this machine."
            )


def make_tables(db: sqlite3.Connection) -> None:
    """Make what is missing of the tables and their guards, in the caller's transaction.

    Raises:
        Unsuitable: A newer build made this database; it is left as it is.
    """
    version = db.execute("PRAGMA user_version").fetchone()[0]
    if version > SCHEMA_VERSION:
        raise Unsuitable(
            f"A newer program made this database (form {version}, this one knows "
            f"{SCHEMA_VERSION}). Use the newer program."
        )
    for statement in TABLES:
        db.execute(statement)
    for table in GUARDED:
        for deed in ("UPDATE", "DELETE"):
            db.execute(
                f"CREATE TRIGGER IF NOT EXISTS {table}_never_{deed.lower()} BEFORE {deed} "
                f"ON {table} BEGIN SELECT RAISE(ABORT, 'an {table} row is never changed'); END"
            )
    if version < SCHEMA_VERSION:
        db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
