"""The record in SQLite: nothing in it changes, nothing in it is out of place."""

import dataclasses
import sqlite3

import pytest

from sync import ledger
from sync.entry import Entry, b64, compose, conceal, new_log_id
from sync.errors import Fork, Gap, NotKept, Unsuitable
from sync.keys import DeviceKey
from sync.ledger import Head

from .harbour import REALM

KEY = DeviceKey.from_seed(bytes([7]) * 32)


@pytest.fixture
def db(tmp_path):
    db = sqlite3.connect(tmp_path / "ledger.db", isolation_level=None)
    ledger.prepare(db)
    ledger.make_tables(db)
    yield db
    db.close()


def chain(count: int, log: str = "", *, scope: tuple[str, ...] = (), fork: str = "") -> list[Entry]:
    log, made, prev = log or new_log_id(), [], b""
    for seq in range(1, count + 1):
        fields = {
            **{"log": log, "seq": seq, "prev": b64(prev), "dev": "D-01", "kind": "note.made"},
            **{"scope": list(scope), "data": {"text": f"{fork}{seq}"}},
        }
        made.append(compose(REALM, KEY, fields, private=conceal({"name": f"N{seq}"})[0]))
        prev = made[-1].hash
    return made


def add(db: sqlite3.Connection, entries: list[Entry]) -> None:
    for entry in entries:
        ledger.add(db, entry, at="t", frm="D-01", realm=REALM)


CHANGES = [
    "UPDATE {0} SET sig = zeroblob(64)",
    "UPDATE {0} SET recv_at = 'later'",
    "DELETE FROM {0}",
    "DELETE FROM {0} WHERE seq = 2",
    "INSERT OR REPLACE INTO {0} SELECT * FROM {0} WHERE seq = 2",
    "REPLACE INTO {0} SELECT * FROM {0} WHERE seq = 1",
]


@pytest.mark.parametrize("change", CHANGES)
@pytest.mark.parametrize("table", ["entry", "branch"])
def test_nothing_kept_is_ever_changed(db, table, change):
    entries = chain(3)
    add(db, entries)
    for entry in entries:
        ledger.add_branch(db, entry, at="t", frm="D-01")
    before = db.execute(f"SELECT * FROM {table}").fetchall()
    with pytest.raises(sqlite3.IntegrityError, match="never changed"):
        db.execute(change.format(table))
    assert db.execute(f"SELECT * FROM {table}").fetchall() == before


def test_without_recursive_triggers_a_replace_would_slip_past_the_guard(db):
    # The control: it shows that the setting is what holds the guard.
    add(db, chain(1))
    db.execute("PRAGMA recursive_triggers = OFF")
    db.execute(
        "INSERT OR REPLACE INTO entry "
        "SELECT log, seq, hash, body, zeroblob(64), 't', 'x' FROM entry"
    )
    assert db.execute("SELECT sig FROM entry").fetchone()[0] == bytes(64)


def test_the_settings_are_those_that_keep_what_was_answered_for(db):
    def setting(name: str) -> object:
        return db.execute(f"PRAGMA {name}").fetchone()[0]

    assert setting("journal_mode") == "wal"
    assert setting("synchronous") == 2  # FULL
    assert (setting("recursive_triggers"), setting("foreign_keys")) == (1, 1)
    assert (setting("trusted_schema"), setting("mmap_size")) == (0, 0)


def test_a_newer_programs_database_is_left_alone(db):
    db.execute("PRAGMA user_version = 99")
    with pytest.raises(Unsuitable, match="newer program"):
        ledger.make_tables(db)


def test_tables_are_made_in_the_callers_transaction(tmp_path):
    db = sqlite3.connect(tmp_path / "new.db", isolation_level=None)
    ledger.prepare(db)
    db.execute("BEGIN IMMEDIATE")
    ledger.make_tables(db)
    db.execute("ROLLBACK")
    assert db.execute("SELECT COUNT(*) FROM sqlite_master").fetchone() == (0,)
    db.close()


def test_a_log_grows_by_one_and_states_its_head(db):
    entries = chain(3)
    assert ledger.head(db, entries[0].log) is None
    add(db, entries)
    last = Head(3, entries[2].hash)
    assert ledger.head(db, entries[0].log) == last
    assert ledger.heads(db) == {entries[0].log: last}
    assert ledger.hash_at(db, entries[0].log, 2) == entries[1].hash
    assert ledger.hash_at(db, entries[0].log, 4) is None


def test_an_entry_without_its_forerunner_is_a_gap(db):
    entries = chain(3)
    add(db, entries[:1])
    with pytest.raises(Gap) as raised:
        add(db, entries[2:])
    assert (raised.value.wanted, raised.value.got) == (2, 3)


def test_another_entry_for_a_taken_place_is_a_fork(db):
    entries = chain(3)
    other = chain(3, entries[0].log, fork="other ")
    add(db, entries)
    for entry in (other[1], other[2]):
        with pytest.raises(Fork):
            add(db, [entry])


def test_an_entry_that_follows_another_history_is_a_fork(db):
    entries = chain(3)
    other = chain(3, entries[0].log, fork="other ")
    add(db, entries[:2])
    with pytest.raises(Fork):
        add(db, other[2:])


def test_a_row_that_reads_back_otherwise_undoes_the_act(db):
    # A trigger stands in for a disk that returns other bytes than it was given.
    db.execute("DROP TRIGGER entry_never_update")
    db.execute(
        "CREATE TRIGGER rot AFTER INSERT ON entry BEGIN "
        "UPDATE entry SET sig = zeroblob(64) WHERE hash = NEW.hash; END"
    )
    with pytest.raises(NotKept, match="run verify"):
        add(db, chain(1))


def test_an_entry_under_a_false_hash_is_not_kept(db):
    entry = chain(1)[0]
    with pytest.raises(NotKept):
        add(db, [dataclasses.replace(entry, hash=bytes(32))])


def test_entries_come_back_as_they_were_with_their_private_part(db):
    entries = chain(5)
    add(db, entries)
    assert ledger.read(db, entries[0].log, 1, 10) == entries
    assert ledger.read(db, entries[0].log, 2, 2) == entries[1:3]
    assert ledger.find(db, entries[3].hash) == entries[3]
    assert ledger.find(db, bytes(32)) is None


def test_reading_stops_at_its_measure_of_bytes_but_always_moves(db):
    entries = chain(5)
    add(db, entries)
    two = sum(len(entry.body) + len(entry.private or b"") for entry in entries[:2])
    assert len(ledger.read(db, entries[0].log, 1, 10, most_bytes=two)) == 2
    assert len(ledger.read(db, entries[0].log, 1, 10, most_bytes=1)) == 1


def test_a_purged_private_part_leaves_its_entry_whole(db):
    entries = chain(1)
    add(db, entries)
    db.execute("DELETE FROM private")
    found = ledger.find(db, entries[0].hash)
    assert found is not None
    assert (found.body, found.sig, found.private) == (entries[0].body, entries[0].sig, None)


def test_a_scope_is_read_past_each_logs_cursor(db):
    one, two = chain(3, scope=("route:1", "all")), chain(2, scope=("route:1",))
    add(db, one)
    add(db, two)
    logs = sorted([one, two], key=lambda entries: entries[0].log)
    assert ledger.scoped(db, "route:1", {}, 10) == [*logs[0], *logs[1]]
    assert ledger.scoped(db, "all", {}, 10) == one
    after = {one[0].log: Head(2, one[1].hash)}
    wanted = {one[2].hash, *(entry.hash for entry in two)}
    assert {entry.hash for entry in ledger.scoped(db, "route:1", after, 10)} == wanted
    assert ledger.scoped(db, "route:1", {}, 2) == [*logs[0], *logs[1]][:2]
    assert ledger.scoped(db, "route:2", {}, 10) == []


def test_a_borrowed_entry_goes_with_the_last_scope_it_came_by(db):
    first, second = chain(2)
    assert ledger.borrow(db, first, scope="route:1", at="t", frm="C")
    assert not ledger.borrow(db, first, scope="route:2", at="t", frm="C")
    ledger.borrow(db, second, scope="route:1", at="t", frm="C")
    assert ledger.cursors(db, "route:1") == {first.log: Head(2, second.hash)}
    ledger.drop_scope(db, "route:1")
    assert ledger.find(db, first.hash) == first
    assert ledger.find(db, second.hash) is None
    assert ledger.cursors(db, "route:1") == {}
    assert ledger.cursors(db, "route:2") == {first.log: Head(1, first.hash)}


def test_a_sum_tells_what_is_missing_before_a_cursor(db):
    entries = chain(4)
    last = Head(4, entries[3].hash)
    sums = set()
    for entry in (entries[3], entries[0], entries[2], entries[1]):
        ledger.borrow(db, entry, scope="all", at="t", frm="C")
        sums.add(ledger.gist(db, "all", entry.log, last))
    assert len(sums) == 4
    assert ledger.gist(db, "all", last_log := entries[0].log, last) in sums
    assert ledger.gist(db, "all", last_log, Head(2, entries[1].hash)) not in sums


def test_a_borrowed_entry_that_arrives_with_its_whole_log_is_kept_once(db):
    entries = chain(2, scope=("all",))
    ledger.borrow(db, entries[1], scope="all", at="t", frm="C")
    add(db, entries)
    assert db.execute("SELECT COUNT(*) FROM borrowed").fetchone() == (0,)
    assert ledger.scoped(db, "all", {}, 10) == entries


def test_a_history_that_central_named_is_stated_from_its_place_on(db):
    mine = chain(5)
    log = mine[0].log
    theirs, thirds = chain(7, log, fork="b"), chain(4, log, fork="c")
    add(db, mine)
    for entry in theirs[2:]:
        ledger.add_branch(db, entry, stated=1, at="t", frm="C")
    assert ledger.head(db, log) == Head(7, theirs[6].hash)
    assert [e.hash for e in ledger.read(db, log, 1, 10)] == [
        e.hash for e in (*mine[:2], *theirs[2:])
    ]
    assert ledger.next_stated(db, log) == 2
    for entry in thirds[3:]:
        ledger.add_branch(db, entry, stated=2, at="t", frm="C")
    assert ledger.head(db, log) == Head(4, thirds[3].hash)
    assert [e.hash for e in ledger.read(db, log, 2, 10)] == [
        e.hash for e in (mine[1], theirs[2], thirds[3])
    ]
    assert ledger.hash_at(db, log, 5) is None


def test_a_kept_losing_branch_states_nothing(db):
    mine = chain(3)
    add(db, mine)
    other = chain(3, mine[0].log, fork="b")
    assert ledger.add_branch(db, other[2], at="t", frm="D")
    assert not ledger.add_branch(db, other[2], at="t", frm="D")
    assert ledger.head(db, mine[0].log) == Head(3, mine[2].hash)
    assert ledger.find(db, other[2].hash) == other[2]
