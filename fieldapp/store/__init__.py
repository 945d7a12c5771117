"""The one opener of transactions of a node: ``act()`` records a press, ``follow()`` brings pages.

A fact becomes an entry of this node's log, the page tables follow, the row is read back and hashed
again, and COMMIT is on disk before anybody is answered (design 3). The store hands ``sync`` the
hooks it needs and knows nothing of HTTP.

``disk`` holds the folder and the transactions, ``logs`` appends, ``shared`` answers ``sync``,
``starting`` opens; ``Store`` is all of them and ``act()``.
"""

import hashlib
import json
import sqlite3
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from fieldapp import projections
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc as text
from fieldapp.identity import DATABASE as DATABASE
from fieldapp.projections.pages import Pages
from fieldapp.schemas.facts import check_fact
from fieldapp.store.disk import BALLAST as BALLAST
from fieldapp.store.disk import REALM as REALM
from fieldapp.store.disk import RecordStopped as RecordStopped
from fieldapp.store.starting import DAMAGED as DAMAGED
from fieldapp.store.starting import Starting
from sync.entry import Entry, b64


class ActDiffers(RuleBroken):
    """The act was recorded with other fields, at ``at``; ``answer`` is what it became."""

    kind = "act-differs"


@dataclass(frozen=True)
class Answer:
    """The outcome of an act; ``again`` when it was recorded before."""

    answer: Mapping[str, Any]
    entries: tuple[str, ...]
    again: bool


Decide = Callable[[Pages, Reading], "Sequence[Fact] | Decision"]


class Store(Starting):
    """One node's record in one folder: its lock, its key, its one writing connection."""

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


def _mark(fields: Mapping[str, Any]) -> str:
    text_of = json.dumps(fields, sort_keys=True, ensure_ascii=False, default=str)
    return hashlib.sha256(text_of.encode()).hexdigest()
