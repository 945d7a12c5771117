"""What a node of the demo sees now, read from its folder without a change to a byte."""

import contextlib
import sqlite3
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from fieldapp import identity
from fieldapp.projections.pages import Pages
from sync import ledger

IN_HAND = "SELECT visit FROM p_visit WHERE state IN ('open', 'left')"


@dataclass(frozen=True, slots=True)
class Seen:
    """What stands at one place: entries, and bottles of the round under way."""

    recorded: int
    """Of the tablet's own entries, those that this place holds."""
    waiting: int
    """Of them, those that central has not acknowledged, as far as this place knows."""
    filled: int
    received: int


@dataclass(frozen=True, slots=True)
class Bottle:
    """A label of the day: where it belongs and what is on it. A spare belongs nowhere yet."""

    code: str
    site: str
    draw: int
    kind: str
    filled: bool


def tablet_sees(tablet: Path) -> Seen:
    """Return what the tablet holds and knows to be confirmed."""
    with _pages(tablet) as pages:
        db = pages.db
        heads = {log: ledger.head(db, log) for log in _logs(db)}
        known = {log: ledger.acknowledged(db, log) for log in heads}
        recorded = sum(head.seq for head in heads.values() if head)
        confirmed = sum(one.seq for one in known.values() if one)
        return Seen(recorded, recorded - confirmed, **_bottles(pages))


def central_sees(central: Path, tablet: Path) -> Seen:
    """Return what central holds of the tablet's entries."""
    with _pages(tablet) as pages:
        logs = _logs(pages.db)
    with _pages(central) as pages:
        heads = [ledger.head(pages.db, log) for log in logs]
        return Seen(sum(head.seq for head in heads if head), 0, **_bottles(pages))


def bottles(central: Path) -> list[Bottle]:
    """Return the labels of the round under way in the order of their stops, spares last."""
    with _pages(central) as pages:
        rows = pages.rows(
            "SELECT b.* FROM p_bottle b LEFT JOIN p_visit v ON v.visit = b.printed_for"
            " WHERE b.route = (SELECT route FROM p_route ORDER BY day DESC LIMIT 1)"
            " ORDER BY v.position IS NULL, v.position, b.draw, b.bottle"
        )
    return [
        Bottle(row["bottle"], row["site"], row["draw"], row["kind"], bool(row["filled"]))
        for row in rows
    ]


def next_ring(tablet: Path) -> datetime | None:
    """Return when the first wait of a visit in hand is over; nothing where none waits."""
    now = identity.clock_of(tablet).read()
    with _pages(tablet) as pages:
        visits = [str(row["visit"]) for row in pages.rows(IN_HAND)]
        told = [one for visit in visits if (one := pages.standing(visit, now)) is not None]
    ends = [at for one in told for at in (one.due.until, one.earliest_draw) if at is not None]
    return min((at for at in ends if at > now.at), default=None)


def zone_of(central: Path) -> str:
    """Return the zone of the round under way."""
    with _pages(central) as pages:
        return str(pages.rounds()[0]["zone"])


def _bottles(pages: Pages) -> dict[str, int]:
    now = pages.rounds()
    row = pages.row(
        "SELECT SUM(filled) AS filled, SUM(received_at <> '') AS received FROM p_bottle"
        " WHERE round = ?",
        (str(now[0]["round"]) if now else "",),
    )
    return {name: int((row and row[name]) or 0) for name in ("filled", "received")}


def _logs(db: sqlite3.Connection) -> list[str]:
    return [str(row[0]) for row in db.execute("SELECT log FROM own_log")]


@contextlib.contextmanager
def _pages(folder: Path) -> Iterator[Pages]:
    uri = (folder / identity.DATABASE).resolve().as_uri() + "?mode=ro"
    db = sqlite3.connect(uri, uri=True, isolation_level=None)
    try:
        ledger.prepare(db, reader=True)
        db.execute("BEGIN")
        yield Pages(db)
    finally:
        db.close()
