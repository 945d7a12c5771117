"""The fact table: what each entry says, by subject. Rows are only added."""

import base64
import json
import sqlite3
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

from fieldapp.domain.facts import KINDS, EntryCorrected, EntryWithdrawn, Fact
from fieldapp.domain.facts.base import private_fields
from fieldapp.domain.recorded import Press, Recorded
from fieldapp.projections.tables import put

_COLUMNS = (
    "f.hash, f.kind, f.log, f.seq, f.at, f.off, f.mono, f.boot, f.by, f.act, f.replaces, f.data"
)
_HIDDEN = " LEFT JOIN private v ON v.h = f.priv"
STANDING_ANSWER = (
    "NOT EXISTS (SELECT 1 FROM p_gone w WHERE w.hash = g.by_hash AND w.how = 'withdrawn')"
)
"""Of a row ``g`` of ``p_gone``: what replaced or withdrew the entry was not itself taken back."""
LIVING = f"NOT EXISTS (SELECT 1 FROM p_gone g WHERE g.hash = f.hash AND {STANDING_ANSWER})"
"""Of a row ``f`` of ``p_fact``: nothing that stands replaces or withdraws it."""


def take(db: sqlite3.Connection, name: str, body: Mapping[str, Any]) -> set[str]:
    """Add one verified entry's fact and return the subjects that have to be told anew.

    ``name`` is the entry's hash as base64url text. An unknown kind, or data that do not make a
    fact, is listed in ``p_unread`` and shown to a person; it never stops the transfer.
    """
    known = KINDS.get(body["kind"])
    if known is None:
        return _unread(db, name, body, "written by a newer program")
    try:
        given = known.read(body["data"])
        if isinstance(given, EntryCorrected):
            return _correct(db, name, body, given)
    except (TypeError, KeyError, ValueError, AttributeError) as fault:
        return _unread(db, name, body, str(fault))
    _add(db, name, body, given, replaces="")
    subjects = set(given.subjects()) or {f"entry:{name}"}
    if isinstance(given, EntryWithdrawn):
        _gone(db, given.of, name, "withdrawn")
        subjects |= _subjects_of(db, given.of)
    return subjects


def _correct(
    db: sqlite3.Connection, name: str, body: Mapping[str, Any], given: EntryCorrected
) -> set[str]:
    """Run the corrected kind under the correction's own hash, with ``replaces`` (design 5)."""
    corrected = KINDS[given.kind_].read(given.data_)
    _add(db, name, {**body, "kind": given.kind_}, corrected, replaces=given.of)
    _gone(db, given.of, name, "corrected")
    entries = {f"entry:{given.of}", f"entry:{name}"}
    return set(corrected.subjects()) | _subjects_of(db, given.of) | entries


def _add(
    db: sqlite3.Connection, name: str, body: Mapping[str, Any], given: Fact, *, replaces: str
) -> None:
    row = {
        "hash": name, "kind": body["kind"], "log": body["log"], "seq": body["seq"],
        "at": body["at"], "off": body["off"], "mono": body["mono"], "boot": body["boot"],
        "by": body["by"], "act": body["id"], "replaces": replaces,
        "data": json.dumps(given.data(), ensure_ascii=False, separators=(",", ":")),
        "priv": _unnamed((body.get("priv") or {}).get("h", "")),
    }  # fmt: skip
    put(db, "p_fact", row)
    db.executemany(
        "INSERT OR IGNORE INTO p_about (subject, hash) VALUES (?, ?)",
        [(subject, name) for subject in given.subjects()],
    )


def _gone(db: sqlite3.Connection, of: str, by: str, how: str) -> None:
    db.execute("INSERT OR IGNORE INTO p_gone (hash, by_hash, how) VALUES (?, ?, ?)", (of, by, how))


def _unread(db: sqlite3.Connection, name: str, body: Mapping[str, Any], says: str) -> set[str]:
    put(db, "p_unread", {
        "hash": name, "kind": str(body.get("kind", "")), "log": body["log"], "seq": body["seq"],
        "says": says,
    })  # fmt: skip
    return set()


def _subjects_of(db: sqlite3.Connection, name: str) -> set[str]:
    """Return what an entry is about; of an answer also what the answered entry is about."""
    rows = db.execute("SELECT subject FROM p_about WHERE hash = ?", (name,)).fetchall()
    found = {row[0] for row in rows}
    answered = db.execute("SELECT hash FROM p_gone WHERE by_hash = ?", (name,)).fetchall()
    for (of,) in answered:
        found |= {f"entry:{of}"} | _subjects_of(db, of)
    return found


def about(
    db: sqlite3.Connection,
    subject: str,
    kinds: Sequence[str] = (),
    *,
    gone: bool = False,
    with_private: bool = False,
) -> list[Recorded]:
    """Return what is recorded about a subject, living entries only unless ``gone``."""
    sql = (
        f"SELECT {_COLUMNS}{', v.p' if with_private else ''}"
        f" FROM p_about a JOIN p_fact f USING (hash){_HIDDEN if with_private else ''}"
        " WHERE a.subject = ?"
    )
    given: list[Any] = [subject]
    if kinds:
        sql += f" AND f.kind IN ({', '.join('?' for _ in kinds)})"
        given += kinds
    if not gone:
        sql += f" AND {LIVING}"
    rows = db.execute(f"{sql} ORDER BY f.at, f.log, f.seq", given).fetchall()
    return [_placed(db, recorded(row)) for row in rows]


def one(db: sqlite3.Connection, name: str, *, with_private: bool = False) -> Recorded | None:
    """Return the fact of that entry, gone or not."""
    row = db.execute(
        f"SELECT {_COLUMNS}{', v.p' if with_private else ''} FROM p_fact f"
        f"{_HIDDEN if with_private else ''} WHERE f.hash = ?",
        (name,),
    ).fetchone()
    return _placed(db, recorded(row)) if row else None


def first_of(db: sqlite3.Connection, name: str) -> str:
    """Return the entry that a chain of corrections began with; itself where it corrects none."""
    while True:
        row = db.execute("SELECT replaces FROM p_fact WHERE hash = ?", (name,)).fetchone()
        if row is None or not row[0]:
            return name
        name = str(row[0])


def corrections_of(db: sqlite3.Connection, first: str, *, gone: bool = False) -> list[Recorded]:
    """Return the corrections that stand of an entry, those of its corrections too."""
    rows = db.execute(
        "WITH RECURSIVE chain (hash) AS (SELECT hash FROM p_fact WHERE replaces = ?"
        " UNION SELECT n.hash FROM p_fact n JOIN chain c ON n.replaces = c.hash)"
        f" SELECT f.hash FROM chain JOIN p_fact f USING (hash){'' if gone else f' WHERE {LIVING}'}"
        " ORDER BY f.at, f.log, f.seq",
        (first,),
    ).fetchall()
    found = (one(db, row[0]) for row in rows)
    return [entry for entry in found if entry is not None]


def _placed(db: sqlite3.Connection, entry: Recorded) -> Recorded:
    """Give a correction the press of the entry it corrects, where that is here."""
    if not entry.replaces:
        return entry
    row = db.execute(
        "SELECT log, seq, at, off, mono, boot, replaces FROM p_fact WHERE hash = ?",
        (first_of(db, entry.replaces),),
    ).fetchone()
    if row is None or row[6]:
        return entry
    at = datetime.fromisoformat(row[2]).astimezone(UTC)
    return replace(entry, stands_for=Press(row[0], row[1], at, row[3], row[4], row[5]))


def recorded(row: Sequence[Any]) -> Recorded:
    """Make the recorded fact of a row, with its private part where the row carries one.

    A correction's own reason is not the corrected fact's: that one stands under ``hidden``.
    """
    hidden = reveal(row[12]) if len(row) > 12 and row[12] else {}
    if row[10]:
        hidden = hidden.get("hidden") or {}
    made = KINDS[row[1]].read(json.loads(row[11]), hidden)
    at = datetime.fromisoformat(row[4]).astimezone(UTC)
    return Recorded(
        fact=made, hash=row[0], log=row[2], seq=row[3], at=at, off=row[5], mono=row[6],
        boot=row[7], by=row[8], act=row[9], replaces=row[10],
    )  # fmt: skip


def reveal(private: bytes) -> dict[str, Any]:
    """Return the fields of a private part; the salt stays behind."""
    return {key: value for key, value in json.loads(private).items() if key != "salt"}


def private_of(db: sqlite3.Connection, priv: bytes, fact_class: type[Fact]) -> dict[str, str]:
    """Return the private fields under that hash as text, empty where this node holds none."""
    row = db.execute("SELECT p FROM private WHERE h = ?", (priv,)).fetchone() if priv else None
    held = reveal(row[0]) if row else {}
    return {name: str(held.get(name, "")) for name in sorted(private_fields(fact_class))}


def written_with(db: sqlite3.Connection, name: str) -> dict[str, Any]:
    """Return the private part of that entry as it was written: of a correction its own reason."""
    row = db.execute(
        "SELECT v.p FROM p_fact f JOIN private v ON v.h = f.priv WHERE f.hash = ?", (name,)
    ).fetchone()
    return reveal(row[0]) if row else {}


def hash_name(digest: bytes) -> str:
    """Return an entry's hash as the text by which references and pages name it."""
    return base64.urlsafe_b64encode(digest).rstrip(b"=").decode()


def _unnamed(name: str) -> bytes:
    return base64.urlsafe_b64decode(name + "=" * (-len(name) % 4))


def living(entries: Iterable[Recorded], kind: str) -> list[Recorded]:
    """Return the entries of one kind, in the order given."""
    return [entry for entry in entries if entry.fact.kind == kind]
