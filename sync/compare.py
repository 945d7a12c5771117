"""One own log beside what central says of it: by number and hash, never by number alone."""

import sqlite3
from dataclasses import dataclass

from sync import ledger
from sync.acknowledgement import Acknowledgement
from sync.answered import Said
from sync.encoding import b64
from sync.ledger import Head

BEHIND = "behind"
FORK = "fork"


@dataclass(frozen=True, slots=True)
class View:
    """What central says of one own log beside what is held here."""

    log: str
    there: Head | None
    same: bool
    why: str | None  # behind or fork, where this log cannot go on
    note: Acknowledgement | None  # that proves central holds a place of our history
    old: Acknowledgement | None

    @classmethod
    def of(
        cls, db: sqlite3.Connection, log: str, said: Said, note: Acknowledgement | None
    ) -> "View":
        """Compare by number and hash; a number alone proves nothing."""
        there, mine = said.there, ledger.head(db, log)
        same = said.at == 0 or b64(ledger.hash_at(db, log, said.at) or b"") == said.at_hash
        longer = there is not None and (mine is None or there.seq > mine.seq)
        why = FORK if not same else BEHIND if longer else None
        if note is not None and ledger.hash_at(db, log, note.seq) != note.hash:
            note = None  # true, but of another history than ours
        return cls(log, there, same, why, note, ledger.acknowledged(db, log))

    @property
    def fell(self) -> bool:
        """Say whether central no longer holds what it once acknowledged."""
        return self.old is not None and (self.shorter or not self.same)

    @property
    def shorter(self) -> bool:
        """Say whether central's log ends before what it acknowledged: it was restored."""
        reach = self.there.seq if self.there else 0
        return self.old is not None and reach < self.old.seq

    @property
    def changes(self) -> bool:
        """Say whether anything has to be written."""
        fresh = self.note is not None and (
            self.old is None or (self.old.seq, self.old.hash) != (self.note.seq, self.note.hash)
        )
        return self.fell or fresh or self.why is not None
