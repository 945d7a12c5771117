"""The logs this node writes, and what central said of them."""

import json
import sqlite3
from collections.abc import Mapping, Sequence
from typing import Any

from fieldapp import identity, projections
from fieldapp.domain.facts import KINDS, Fact, LogOpened
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.pages import Pages
from fieldapp.scopes import scope_of
from fieldapp.store.disk import REALM, Disk
from sync import blobs, ledger
from sync.entry import Entry, b64, compose, conceal, new_log_id

MOST_BYTES = {"protocol.kept": 24 * 1024, "log.carried": 32 * 1024}


class Logs(Disk):
    """Appends entries to the current log; opens a new one when history is in doubt."""

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

    def waiting(self) -> int:
        """Return how many own entries central has not acknowledged."""
        with self.reader() as db:
            return sum(self._waiting(db, log) for log in self.own_logs(db))

    def _waiting(self, db: sqlite3.Connection, log: str) -> int:
        head, known = ledger.head(db, log), ledger.acknowledged(db, log)
        return (head.seq if head else 0) - (known.seq if known else 0)

    def acknowledged_at(self) -> str | None:
        """Return when central signed that it holds the current log, by central's clock."""
        with self.reader() as db:
            known = ledger.acknowledged(db, self.current_log(db))
        return known.at if known else None

    def photos_waiting(self) -> dict[str, int]:
        """Return the photos that central did not say it holds, each with its bytes."""
        with self.reader() as db:
            return blobs.waiting(db, self.own_logs(db))

    def names_blob(self, sha256: str) -> str:
        """Return the media type by which an entry here names that file, empty where none does."""
        with self.reader() as db:
            row = db.execute("SELECT t FROM blob WHERE h = ? LIMIT 1", (sha256,)).fetchone()
        return str(row[0]) if row else ""
