"""Scopes: a device gets what it was granted, from the beginning, and nothing else."""

import pytest

from sync import device, ledger
from sync.entry import b64
from sync.ledger import Head
from sync.pull import Run

from .harbour import Harbour, Node


@pytest.fixture
def harbour() -> Harbour:
    return Harbour()


def borrowed(node: Node) -> set[bytes]:
    return {h for (h,) in node.db.execute("SELECT hash FROM borrowed")}


def test_a_device_gets_its_own_routes_and_no_others(harbour):
    one, two = harbour.device("D-01", "route:1"), harbour.device("D-02", "route:2")
    mine = one.note("on route 1", "route:1")
    theirs = two.note("on route 2", "route:2")
    nobodys = two.note("for nobody")
    everybodys = two.note("for all", "all")
    for node in (one, two, one):
        harbour.sync(node)
    assert one.facts() == {mine, everybodys}
    assert theirs not in borrowed(one)
    assert nobodys not in borrowed(one)


def test_a_scope_that_was_not_granted_is_answered_with_nothing_and_named(harbour):
    one, two = harbour.device("D-01", "route:1"), harbour.device("D-02", "route:2")
    two.note("on route 2", "route:2")
    harbour.sync(two)
    one.asks = ["route:1", "route:2", "route:9", "", "all'; DROP TABLE entry; --"]
    report = harbour.sync(one)
    assert report.denied == ["", "all'; DROP TABLE entry; --", "route:2", "route:9"]
    assert one.facts() == set()


def test_a_route_granted_later_arrives_from_its_beginning(harbour):
    one, two = harbour.device("D-01"), harbour.device("D-02", "route:2")
    early = two.note("early", "route:2", "all")
    later = two.note("later", "route:2")
    harbour.sync(two)
    harbour.sync(one)
    assert one.facts() == {early}
    harbour.central.grant("D-01", "route:2")
    one.asks = ["route:2"]
    harbour.sync(one)
    assert one.facts() == {early, later}
    assert ledger.cursors(one.db, "route:2") != {}


def test_a_route_given_up_and_granted_again_is_whole(harbour):
    one, two = harbour.device("D-01", "route:2"), harbour.device("D-02", "route:2")
    facts = {two.note(f"fact {n}", "route:2") for n in range(5)}
    harbour.sync(two)
    harbour.sync(one)
    with one.transaction() as db:
        ledger.drop_scope(db, "route:2")
        # The application empties its pages of that route; here all pages are of that route.
        db.execute("DELETE FROM page WHERE hash NOT IN (SELECT hash FROM entry)")
        db.execute("DELETE FROM followed WHERE hash NOT IN (SELECT hash FROM entry)")
    assert not borrowed(one) & facts
    harbour.sync(one)
    assert one.facts() == facts


def test_an_entry_in_two_scopes_is_borrowed_once_and_both_cursors_pass_it(harbour):
    one = harbour.device("D-01", "route:1", "lab:L")
    two = harbour.device("D-02")
    fact = two.note("bottle", "route:1", "lab:L")
    harbour.sync(two)
    harbour.sync(one)
    assert fact in borrowed(one)
    log = two.own_logs(two.db)[0]
    for scope in ("route:1", "lab:L"):
        assert ledger.cursors(one.db, scope)[log] == Head(2, fact)
    assert harbour.sync(one).pulled == 0


def test_scopes_interleaved_in_many_logs_arrive_whole_through_small_exchanges(harbour, monkeypatch):
    monkeypatch.setattr("sync.wire.MOST_ENTRIES", 7)
    one = harbour.device("D-01", "route:1", "route:2")
    others = [harbour.device(f"D-1{n}") for n in range(3)]
    facts = set()
    for n in range(20):
        for other in others:
            facts.add(other.note(f"fact {n}", f"route:{n % 3}"))
    for other in others:
        harbour.sync(other)
    unwanted = {entry.hash for entry in ledger.scoped(harbour.central.db, "route:0", {}, 99)}
    harbour.sync(one)
    assert one.facts() == facts - unwanted


def test_a_devices_whole_logs_are_not_sent_back_to_it(harbour):
    one = harbour.device("D-01", "route:1")
    one.note("fact", "route:1", "all")
    harbour.sync(one)
    assert harbour.sync(one).pulled == 0
    assert one.facts() & borrowed(one) == set()


def test_a_log_that_a_restored_device_forgot_comes_back_by_its_scope(harbour):
    one = harbour.device("D-01", "route:1")
    copy = one.snapshot()
    with one.transaction() as db:
        one.open_log(db, "restored")
    fact = one.note("in a log that the backup does not know", "route:1")
    harbour.sync(one)
    one.restore(copy)
    harbour.sync(one)
    assert fact in one.facts()


def test_nobody_reads_the_rest_of_anothers_log(harbour):
    one, two = harbour.device("D-01"), harbour.device("D-02")
    two.note("for nobody else", private={"name": "N"})
    harbour.sync(two)
    harbour.sync(one)
    log = two.own_logs(two.db)[0]
    request = device.ask(one.replica, Run())
    for heads in ({}, {log: {"seq": 0, "hash": ""}}, {log: {"seq": 1, "hash": b64(bytes(32))}}):
        body = {**request, "heads": heads, "want": {log: []}, "nonce": "n"}
        answer = harbour.peer().send("/sync/v1/exchange", body, token=one.replica.token).body
        assert answer["tail"] == []
        assert log not in answer["heads"]
        assert not any(piece["log"] == log for piece in answer["pull"])


@pytest.mark.parametrize("name", [f"D-{n}" for n in range(10, 26)])
def test_keys_arrive_before_what_they_sign_wherever_a_log_sorts(harbour, name):
    one, two = harbour.device("D-01"), harbour.device(name)
    fact = two.note("for all", "all")
    harbour.sync(two)
    report = harbour.sync(one)
    assert report.refused == []
    assert one.facts() == {fact}


def test_a_cursor_that_central_does_not_hold_is_named_and_nothing_is_skipped(harbour):
    one, two = harbour.device("D-01", "route:1"), harbour.device("D-02", "route:1")
    first = two.note("first", "route:1")
    harbour.sync(two)
    copy = harbour.central.snapshot()
    second = two.note("second", "route:1")
    harbour.sync(two)
    harbour.sync(one)
    harbour.restore_central(copy)
    # The author's laptop is gone: only the other device's copy is left.
    report = harbour.sync(one)
    assert report.regressed >= 1
    assert {first, second} <= harbour.central.facts()
    third = harbour.device("D-03", "route:1")
    harbour.sync(third)
    assert third.facts() == {first, second}
    # And if the author comes back after all, nothing is doubled.
    harbour.sync(two)
    assert harbour.sync(third).refused == []
    assert sorted(harbour.central.texts()) == ["first", "second"]


def test_what_is_given_back_is_verified_like_everything_else(harbour):
    one, two = harbour.device("D-01", "route:1"), harbour.device("D-02", "route:1")
    two.note("fact", "route:1")
    harbour.sync(two)
    harbour.sync(one)
    request = device.ask(one.replica, Run())
    log = two.own_logs(two.db)[0]
    forged = {"b": one.db.execute("SELECT body FROM borrowed").fetchone()[0].decode(), "s": "AAAA"}
    request["returned"] = [{"log": log, "entries": [forged, 5, {}]}]
    answer = harbour.peer().send(
        "/sync/v1/exchange", {**request, "nonce": "n"}, token=one.replica.token
    )
    assert [r["why"] for r in answer.body["refused"]] == ["unsigned"] * 3
