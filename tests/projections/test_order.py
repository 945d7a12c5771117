"""Order of arrival never changes page tables: a worked day, shuffled, gives the same pages."""

import sqlite3

import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from fieldapp import projections
from fieldapp.domain import facts
from fieldapp.projections import plans
from fieldapp.projections.tables import make_tables
from sync.entry import Entry
from tests import nodes
from tests.nodes import SAMPLER, latest, press


def entries_of(store) -> list[Entry]:
    """Return every entry a store holds, in the order of its logs."""
    with store.reader() as db:
        return list(store._all_entries(db))


def tables_after(batches: list[list[Entry]]) -> dict[str, list[tuple[object, ...]]]:
    """Return the page tables of a node that those batches reached, one after the other."""
    plans._protocols.clear()  # a node that was started now has read no document yet
    db = sqlite3.connect(":memory:", isolation_level=None)
    make_tables(db)
    for batch in batches:
        projections.follow(db, batch)
    found = nodes.tables_in(db)
    db.close()
    return found


@pytest.fixture(scope="module")
def day(tmp_path_factory):
    """Give all entries of the worked day as central holds them, and central's own page tables."""
    pair = nodes.make_pair(tmp_path_factory.mktemp("day"))
    nodes.work_a_day(pair)
    tables = nodes.page_tables(pair.central)
    entries = entries_of(pair.central)
    pair.close()
    return entries, tables


def test_the_day_holds_what_can_go_wrong(day):
    entries, tables = day
    kinds = {entry.fields()["kind"] for entry in entries}
    assert {"entry.corrected", "entry.withdrawn", "finding.settled", "result.reported"} <= kinds
    assert len({entry.log for entry in entries}) == 2
    assert len(entries) > 100
    found = {row[1] for row in tables["p_finding"]}
    assert {"corrected-twice", "results-differ", "unknown-bottle", "filled-not-received"} <= found
    assert {row[2] for row in tables["p_gone"]} == {"corrected", "withdrawn"}


def test_rebuilt_tables_are_those_that_were_followed(day):
    entries, tables = day
    assert tables_after([entries]) == tables


@settings(
    max_examples=60,
    deadline=None,
    database=None,
    print_blob=True,
    phases=[Phase.explicit, Phase.generate],  # a smaller shuffle of a day says no more
    suppress_health_check=[HealthCheck.too_slow],
)
@given(order=st.randoms(use_true_random=False), most=st.sampled_from([1, 3, 17, 200]))
def test_any_order_of_arrival_and_any_batches_give_the_same_tables(day, order, most):
    entries, tables = day
    shuffled = list(entries)
    order.shuffle(shuffled)
    batches = []
    while shuffled:
        size = order.randint(1, most)
        batches.append(shuffled[:size])
        shuffled = shuffled[size:]
    assert tables_after(batches) == tables


def test_the_day_told_backwards_one_entry_at_a_time_gives_the_same_tables(day):
    entries, tables = day
    assert tables_after([[entry] for entry in reversed(entries)]) == tables


def test_what_came_twice_counts_once(day):
    entries, tables = day
    assert tables_after([entries, entries[40:60], [entries[3]]]) == tables


LAST = ["round.opened", "protocol.kept", "visit.planned", "bottle.issued", "entry.corrected",
        "finding.settled", "site.listed", "device.enrolled"]  # fmt: skip


@pytest.mark.parametrize("kind", LAST)
def test_what_others_hang_on_may_come_last(day, kind):
    entries, tables = day
    late = [entry for entry in entries if entry.fields()["kind"] == kind]
    early = [entry for entry in entries if entry.fields()["kind"] != kind]
    assert late
    assert tables_after([early, *[[entry] for entry in late]]) == tables


@pytest.mark.parametrize("answer", ["entry.corrected", "entry.withdrawn"])
def test_an_answer_may_come_before_the_entry_it_answers(day, answer):
    entries, tables = day
    first = [entry for entry in entries if entry.fields()["kind"] == answer]
    rest = [entry for entry in entries if entry.fields()["kind"] != answer]
    assert tables_after([first, rest]) == tables
    assert tables_after([[entry] for entry in (*first, *rest)]) == tables


def test_a_due_time_that_comes_after_the_filling_still_counts(planned, clock):
    # The round says 48 hours; without it the rule of the house would.
    opened = next(e for e in entries_of(planned) if e.fields()["kind"] == "round.opened")
    changed = {**opened.fields()["data"], "due": "PT5H"}
    code = nodes.issue(planned)[0]
    press(planned, facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line"))
    press(planned, facts.RoundChanged.read(changed))
    with planned.pages() as pages:
        (row,) = pages.rows("SELECT opens_at FROM p_finding WHERE kind = 'filled-not-received'")
    assert row["opens_at"] == "2027-05-04T16:40:00.000Z"


def test_a_store_rebuilds_what_it_followed(planned):
    code = nodes.issue(planned)[0]
    press(planned, facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line"))
    taken = latest(planned, f"bottle:{code}", "bottle.filled")
    press(planned, facts.EntryWithdrawn(of=taken.hash, reason="wrong tap"), by=SAMPLER)
    before = nodes.page_tables(planned)
    with planned.transaction() as db:
        db.execute("UPDATE p_bottle SET filled = 7, site = 'nowhere'")
        db.execute("DELETE FROM p_fact")
    assert planned.rebuild() == nodes.count(planned)
    assert nodes.page_tables(planned) == before


def test_a_withdrawn_filling_leaves_the_bottle_empty_and_the_entry_readable(planned):
    code = nodes.issue(planned)[0]
    press(planned, facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line"))
    taken = latest(planned, f"bottle:{code}", "bottle.filled")
    press(planned, facts.EntryWithdrawn(of=taken.hash, reason="wrong tap"))
    with planned.pages() as pages:
        assert pages.bottle(code)["filled"] == 0
        assert taken.hash in [entry.hash for entry in pages.story(f"bottle:{code}")]
        assert pages.gone([taken.hash])[taken.hash]["how"] == "withdrawn"


def test_a_corrected_filling_shows_the_new_data_under_the_corrections_own_hash(planned):
    code = nodes.issue(planned)[0]
    filled = facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line")
    press(planned, filled)
    taken = latest(planned, f"bottle:{code}", "bottle.filled")
    data = {**filled.data(), "fill": "below"}
    press(planned, facts.EntryCorrected(of=taken.hash, kind_="bottle.filled", data_=data))
    with planned.pages() as pages:
        assert pages.bottle(code)["fill"] == "below"
        living = [e for e in pages.recorded("V-0401") if e.fact.kind == "bottle.filled"]
        assert [entry.replaces for entry in living] == [taken.hash]


def test_a_correction_taken_back_gives_the_first_entry_its_place_again(planned):
    code = nodes.issue(planned)[0]
    filled = facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line")
    press(planned, filled)
    taken = latest(planned, f"bottle:{code}", "bottle.filled")
    data = {**filled.data(), "fill": "below"}
    correction = facts.EntryCorrected(of=taken.hash, kind_="bottle.filled", data_=data)
    (made,) = press(planned, correction).entries
    press(planned, facts.EntryWithdrawn(of=made, reason="it was full after all"))
    with planned.pages() as pages:
        assert pages.bottle(code)["fill"] == "line"
        assert pages.bottle(code)["filled"] == 1


def test_a_withdrawal_taken_back_gives_the_entry_its_place_again(planned):
    code = nodes.issue(planned)[0]
    (filled,) = press(
        planned, facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line")
    ).entries
    (withdrawn,) = press(planned, facts.EntryWithdrawn(of=filled)).entries
    press(planned, facts.EntryWithdrawn(of=withdrawn))
    with planned.pages() as pages:
        assert pages.bottle(code)["filled"] == 1
        assert pages.gone([filled]) == {}


def test_of_two_corrections_the_finding_goes_when_one_is_taken_back(planned):
    code = nodes.issue(planned)[0]
    filled = facts.BottleFilled(visit="V-0401", bottle=code, draw=1, fill="line")
    (of,) = press(planned, filled).entries
    made = []
    for fill in ("below", "over"):
        data = {**filled.data(), "fill": fill}
        correction = facts.EntryCorrected(of=of, kind_="bottle.filled", data_=data)
        made += press(planned, correction).entries
    with planned.pages() as pages:
        assert [f["kind"] for f in pages.findings(nodes.MORNING)] == [
            "corrected-twice",
            "filled-twice",
        ]
    press(planned, facts.EntryWithdrawn(of=made[0]))
    with planned.pages() as pages:
        assert pages.findings(nodes.MORNING) == []
        assert pages.bottle(code)["fill"] == "over"


def test_a_newer_programs_kind_is_kept_listed_and_hurts_no_page(day):
    entries, tables = day
    strange = entries[-1].fields() | {"kind": "tap.sung", "data": {"visit": "V-0401"}}
    named = Unread(bytes(32), entries[-1].log, entries[-1].seq, _text(strange))
    told = tables_after([entries, [named]])
    assert told.pop("p_unread") == [
        ("A" * 43, "tap.sung", named.log, named.seq, "written by a newer program")
    ]
    assert told == {name: rows for name, rows in tables.items() if name != "p_unread"}


class Unread:
    """A verified entry of a kind that this program does not know."""

    def __init__(self, name: bytes, log: str, seq: int, body: bytes) -> None:
        self.hash, self.log, self.seq, self.body = name, log, seq, body


def _text(fields: dict[str, object]) -> bytes:
    import json

    return json.dumps(fields).encode()
