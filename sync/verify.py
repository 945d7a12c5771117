"""Verify a data folder with nothing but the folder: every entry, hash, signature and chain."""

import json
import shutil
import sqlite3
import tempfile
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from sync import ledger
from sync.encoding import b64, unb64
from sync.entry import OPENED, Entry, Realm, private_part, verify
from sync.errors import BadEntry, SyncError
from sync.folder import QuietHold, read_anchors
from sync.keys import key_id
from sync.rows import ROW, entry_of, with_private
from sync.shelf import FOLDER as BLOBS
from sync.shelf import Shelf

DATABASE = "ledger.db"
CENTRAL = "central.json"
ENROLLED = "device.enrolled"
Progress = Callable[[int, int], None]


@dataclass(frozen=True, slots=True)
class Fault:
    """The first thing that does not hold; log "" and seq 0 where it has no place in a log."""

    log: str
    seq: int
    says: str


@dataclass(frozen=True, slots=True)
class Report:
    """What was verified: entries, logs and blobs that hold, and the first fault or None."""

    entries: int
    logs: int
    first_fault: Fault | None
    blobs: int = 0


class _BrokenError(Exception):
    def __init__(self, log: str, seq: int, says: str) -> None:
        self.fault = Fault(log, seq, says)


def verify_folder(
    folder: Path,
    realm: Realm,
    *,
    database: str = DATABASE,
    progress: Progress | None = None,
) -> Report:
    """Verify everything signed in a data folder and change no byte of it.

    Whole logs are checked from their first entry to their anchor, borrowed and branch entries
    each alone, private parts against the label in their entry, acknowledgements against
    central's key, and every blob that lies in the folder against its name. A blob that an entry
    names and that is not here is no fault: it may wait on the device that took it, or may never
    have been fetched; what was taken away is told by the entry that still names it. Presses
    (``act``) are no evidence and are passed over. Stops at the first fault. Memory does not grow
    with the record.
    """
    check = _Check(realm, progress)
    try:
        with _opened(folder, database) as db:
            check.run(db, folder)
    except _BrokenError as broken:
        return Report(check.entries, check.logs, broken.fault, check.blobs)
    except sqlite3.Error as fault:
        says = f"The database {database} cannot be read ({fault}). Restore it from a backup."
        return Report(check.entries, check.logs, Fault("", 0, says), check.blobs)
    return Report(check.entries, check.logs, None, check.blobs)


@contextmanager
def _opened(folder: Path, database: str) -> Iterator[sqlite3.Connection]:
    path = folder / database
    if not path.is_file():
        raise _BrokenError("", 0, f"There is no database {database} in {folder}. Name its folder.")
    with QuietHold(folder) as quiet, tempfile.TemporaryDirectory() as spare:
        wal = path.with_name(path.name + "-wal")
        if quiet.held:
            how = "mode=ro"
        elif wal.is_file() and wal.stat().st_size:
            # The last node was cut off. Opening the file would write beside it, so a copy is read.
            path = Path(shutil.copy2(path, spare))
            shutil.copy2(wal, spare)
            how = "mode=rw"
        else:
            how = "mode=ro&immutable=1"
        with closing(sqlite3.connect(f"{path.resolve().as_uri()}?{how}", uri=True)) as db:
            ledger.prepare(db, reader=True)
            db.execute("BEGIN")  # one view of the whole, though a node may go on writing
            yield db


@dataclass
class _Check:
    realm: Realm
    progress: Progress | None
    entries: int = 0
    logs: int = 0
    blobs: int = 0
    of: int = 0
    keys: dict[str, bytes] = field(default_factory=dict)
    enrolled: dict[str, set[str]] = field(default_factory=dict)
    openers: list[tuple[str, str, str]] = field(default_factory=list)

    def run(self, db: sqlite3.Connection, folder: Path) -> None:
        """Check all of it, cheapest grounds for distrust first."""
        self._check_file(db)
        central = _central_key(folder)
        if central is not None:
            self.keys[key_id(central)] = central
        # A database without a name lives in a temporary file once it outgrows its cache.
        with closing(sqlite3.connect("")) as seen:
            seen.execute("CREATE TABLE label (h BLOB PRIMARY KEY) WITHOUT ROWID")
            self._check_logs(db, seen)
            self._check_anchors(db, folder)
            self._check_openers()
            self._check_single(db, seen, "borrowed")
            self._check_single(db, seen, "branch")
            self._check_acknowledgements(db, central)
            self._check_private(db, seen)
        self._check_blobs(Shelf(folder / BLOBS))

    def _check_blobs(self, shelf: Shelf) -> None:
        for name in shelf.names():
            try:
                sound = shelf.sound(name)
            except OSError as fault:
                says = f"The file blobs/{name[:2]}/{name[2:]} cannot be read ({fault.strerror})."
                raise _BrokenError("", 0, says) from fault
            if not sound:
                says = (
                    f"The file blobs/{name[:2]}/{name[2:]} is not what it was when it was kept. "
                    "Fetch it again from a node that holds it."
                )
                raise _BrokenError("", 0, says)
            self.blobs += 1

    def _check_file(self, db: sqlite3.Connection) -> None:
        answer = db.execute("PRAGMA integrity_check(1)").fetchone()[0]
        if answer != "ok":
            says = f"The database is damaged ({answer.strip()}). Restore it from a backup."
            raise _BrokenError("", 0, says)
        tables = ("entry", "borrowed", "branch")
        counts = [db.execute(f"SELECT COUNT(*) FROM {table}").fetchone()[0] for table in tables]
        self.of = sum(counts)

    def _check_logs(self, db: sqlite3.Connection, seen: sqlite3.Connection) -> None:
        log, seq, prev, public, dev = "", 0, b"", b"", ""
        for row in db.execute(f"SELECT {ROW} FROM entry ORDER BY log, seq"):
            entry = _entry_of(row)
            if entry.log != log:
                self.logs += 1
                log, seq, prev, public, dev = entry.log, 0, b"", b"", ""
            if entry.seq != seq + 1:
                raise _BrokenError(log, seq + 1, f"Entry {seq + 1} is missing from log {log}.")
            public = public or _opening_key(entry)
            fields = self._check_entry(db, seen, entry, public)
            if fields["prev"] != b64(prev):
                raise _BrokenError(log, entry.seq, "It does not follow from the entry before it.")
            if seq and fields["dev"] != dev:
                raise _BrokenError(log, entry.seq, "It names another device than its log.")
            seq, prev, dev = entry.seq, entry.hash, fields["dev"]
            if seq == 1:
                self.keys[fields["key"]] = public
                self.openers.append((log, dev, fields["key"]))

    def _check_anchors(self, db: sqlite3.Connection, folder: Path) -> None:
        try:
            anchors = read_anchors(folder)
        except SyncError as fault:
            raise _BrokenError("", 0, str(fault)) from fault
        for log, anchor in anchors.items():
            # The anchor speaks of the log as written here, not of a history central named.
            row = db.execute(
                "SELECT hash FROM entry WHERE log = ? AND seq = ?", (log, anchor.seq)
            ).fetchone()
            if row is None:
                last = db.execute("SELECT MAX(seq) FROM entry WHERE log = ?", (log,)).fetchone()[0]
                says = f"The log ends at {last or 0}, but it had reached {anchor.seq}."
                raise _BrokenError(log, (last or 0) + 1, says)
            if bytes(row[0]) != anchor.hash:
                raise _BrokenError(log, anchor.seq, "Another entry stood here before.")

    def _check_openers(self) -> None:
        for log, dev, key in self.openers:
            if dev in self.enrolled and key not in self.enrolled[dev]:
                says = f"It is signed with a key that was never enrolled for {dev}."
                raise _BrokenError(log, 1, says)

    def _check_single(self, db: sqlite3.Connection, seen: sqlite3.Connection, table: str) -> None:
        # Enrolments first: central's key vouches for them and they for all others.
        order = "ORDER BY instr(body, CAST(? AS BLOB)) = 0, log, seq"
        mark = f'"kind":"{ENROLLED}"'
        for row in db.execute(f"SELECT {ROW} FROM {table} {order}", (mark,)):
            entry = _entry_of(row)
            public = self.keys.get(_named_key(entry))
            if public is None:
                says = "It is signed with a key that nobody in this folder vouches for."
                raise _BrokenError(entry.log, entry.seq, says)
            self._check_entry(db, seen, entry, public)

    def _check_entry(
        self, db: sqlite3.Connection, seen: sqlite3.Connection, entry: Entry, public: bytes
    ) -> dict[str, Any]:
        try:
            entry = with_private(db, entry)
            fields = verify(self.realm, entry, public)
        except BadEntry as fault:
            raise _BrokenError(entry.log, entry.seq, f"It does not hold: {fault.why}.") from fault
        except ValueError as fault:
            raise _BrokenError(entry.log, entry.seq, "Its text cannot be read.") from fault
        label = private_part(fields)
        if label is not None and isinstance(label.get("h"), str):
            seen.execute("INSERT INTO label VALUES (?) ON CONFLICT DO NOTHING", (label["h"],))
        if fields["kind"] == ENROLLED:
            self._learn(fields["data"])
        self.entries += 1
        if self.progress is not None and (self.entries % 100 == 0 or self.entries == self.of):
            self.progress(self.entries, self.of)
        return fields

    def _learn(self, data: object) -> None:
        if not isinstance(data, dict) or not isinstance(data.get("dev"), str):
            return  # an odd enrolment vouches for nobody
        try:
            public = unb64(data.get("public_key", ""))
        except ValueError:
            return
        self.enrolled.setdefault(data["dev"], set()).add(key_id(public))
        self.keys[key_id(public)] = public

    def _check_private(self, db: sqlite3.Connection, seen: sqlite3.Connection) -> None:
        for (h,) in db.execute("SELECT h FROM private"):
            label = seen.execute("SELECT 1 FROM label WHERE h = ?", (b64(bytes(h)),)).fetchone()
            if label is None:
                raise _BrokenError("", 0, f"The private part {b64(bytes(h))} is of no entry here.")

    def _check_acknowledgements(self, db: sqlite3.Connection, central: bytes | None) -> None:
        if central is None:
            return
        for (log,) in db.execute("SELECT log FROM acknowledgement ORDER BY log").fetchall():
            given = ledger.acknowledged(db, log)
            if given is None:
                continue
            try:
                given.verify(self.realm, central)
            except BadEntry as fault:
                raise _BrokenError(log, given.seq, str(fault)) from fault
            if ledger.hash_at(db, log, given.seq) != given.hash:
                says = f"Central acknowledged entry {given.seq}, and it is not here any more."
                raise _BrokenError(log, given.seq, says)


def _entry_of(row: Any) -> Entry:
    try:
        return entry_of(row)
    except TypeError as fault:
        raise _BrokenError(str(row[0]), int(row[1]), "Its row holds no bytes.") from fault


def _opening_key(entry: Entry) -> bytes:
    """Return the key that a log's first entry states; the entry is then verified with it."""
    try:
        fields = entry.fields()
        if fields["kind"] != OPENED:
            raise KeyError("kind")
        public = unb64(fields["data"]["public_key"])
    except (KeyError, TypeError, ValueError, RecursionError) as fault:
        says = "The log's first entry does not open it with a public key."
        raise _BrokenError(entry.log, entry.seq, says) from fault
    return public


def _named_key(entry: Entry) -> str:
    try:
        return str(entry.fields()["key"])
    except (KeyError, TypeError, ValueError, RecursionError) as fault:
        raise _BrokenError(entry.log, entry.seq, "Its text cannot be read.") from fault


def _central_key(folder: Path) -> bytes | None:
    path = folder / CENTRAL
    if not path.is_file():
        return None
    try:
        public = unb64(json.loads(path.read_text("utf-8"))["public_key"])
    except (OSError, KeyError, TypeError, ValueError) as fault:
        says = f"{CENTRAL} does not name central's public key. Enrol this device anew."
        raise _BrokenError("", 0, says) from fault
    return public
