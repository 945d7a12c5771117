"""The test of the tests: each planted mutant must be caught by a story of ``scenarios``."""

import sqlite3
from collections.abc import Callable
from dataclasses import replace

import pytest

from sync import adopt, central, compare, device, ledger, reply
from sync.errors import SyncError
from sync.ledger import Head

from . import scenarios

Plant = Callable[[pytest.MonkeyPatch], None]


def compares_by_number_only(patch: pytest.MonkeyPatch) -> None:
    honest = compare.View.of

    def of(db, log, said, note):
        view = honest(db, log, said, note)
        mine = ledger.head(db, log)
        longer = view.there is not None and (mine is None or view.there.seq > mine.seq)
        return replace(view, same=True, why="behind" if longer else None)

    patch.setattr(compare.View, "of", staticmethod(of))


def trusts_old_acknowledgements(patch: pytest.MonkeyPatch) -> None:
    honest = compare.View.of

    def of(db, log, said, note):
        view = honest(db, log, said, note)
        if view.old is not None and (view.there is None or view.there.seq < view.old.seq):
            return replace(view, there=Head(view.old.seq, view.old.hash), note=None, old=None)
        return view

    patch.setattr(compare.View, "of", staticmethod(of))


def drops_the_divergent_tail(patch: pytest.MonkeyPatch) -> None:
    patch.setattr(adopt, "_from", lambda db, log, first: [])


def compares_the_current_log_only(patch: pytest.MonkeyPatch) -> None:
    honest = device.ask

    def ask(replica, run):
        request = honest(replica, run)
        current = replica.hooks.own_logs(replica.hooks.db)[-1]
        request["heads"] = {current: request["heads"][current]}
        request["push"] = [piece for piece in request["push"] if piece["log"] == current]
        return request

    patch.setattr(device, "ask", ask)


def central_lets_the_last_writer_win(patch: pytest.MonkeyPatch) -> None:
    def append(replica, log, entries, dev):
        with replica.hooks.transaction() as db:
            _unguarded(db, "DELETE FROM entry WHERE log = ? AND seq >= ?", log, entries[0].seq)
            held = ledger.head(db, log)
            if entries[0].seq != (held.seq if held else 0) + 1:
                return reply.Refusal(log, entries[0].seq, "gap", held)
            for entry in entries:
                _insert(db, entry)
            new = [e for e in entries if not _followed(db, e.hash)]
            replica.hooks.follow(db, new)
            gone = "SELECT hash FROM page WHERE hash IN (SELECT hash FROM followed)"
            db.execute(
                f"DELETE FROM page WHERE hash IN ({gone}) AND hash NOT IN "
                "(SELECT hash FROM entry) AND hash NOT IN (SELECT hash FROM borrowed)"
            )
        return None

    patch.setattr(central, "_append", append)


def central_accepts_gaps(patch: pytest.MonkeyPatch) -> None:
    def append(replica, log, entries, dev):
        with replica.hooks.transaction() as db:
            fresh = [e for e in entries if ledger.hash_at(db, log, e.seq) is None]
            for entry in fresh:
                _insert(db, entry)
            replica.hooks.follow(db, [e for e in fresh if not _followed(db, e.hash)])
        return

    patch.setattr(central, "_append", append)


def pull_cursors_are_numbers(patch: pytest.MonkeyPatch) -> None:
    """Central resumes from the number alone and never learns that it lost something."""

    def cursors(self, scope):
        never = Head(2**62, b"")
        have = {log: place for log, (place, _) in self.asked.have[scope].items()}
        return {**have, **{log: never for log in self.asked.heads}}

    patch.setattr(reply.Reply, "_cursors", cursors)


def _unguarded(db: sqlite3.Connection, statement: str, *values: object) -> None:
    db.execute("DROP TRIGGER IF EXISTS entry_never_delete")
    db.execute(statement, values)


def _insert(db: sqlite3.Connection, entry) -> None:
    row = (entry.log, entry.seq, entry.hash, entry.body, entry.sig, "t", "x")
    db.execute("INSERT INTO entry VALUES (?, ?, ?, ?, ?, ?, ?)", row)


def _followed(db: sqlite3.Connection, hash_: bytes) -> bool:
    return db.execute("SELECT 1 FROM followed WHERE hash = ?", (hash_,)).fetchone() is not None


MUTANTS: list[Plant] = [
    compares_by_number_only,
    trusts_old_acknowledgements,
    drops_the_divergent_tail,
    compares_the_current_log_only,
    central_lets_the_last_writer_win,
    central_accepts_gaps,
    pull_cursors_are_numbers,
]


def killers(stories: list[Callable[[], None]]) -> list[str]:
    """Return the stories that fail."""
    failed = []
    for story in stories:
        try:
            story()
        except (AssertionError, SyncError, sqlite3.Error):
            failed.append(story.__name__)
    return failed


@pytest.mark.parametrize("plant", MUTANTS, ids=lambda plant: plant.__name__)
def test_a_planted_mutant_is_caught(plant):
    with pytest.MonkeyPatch.context() as patch:
        plant(patch)
        assert killers(scenarios.STORIES), f"{plant.__name__} passes every story"
    assert killers(scenarios.STORIES) == []
