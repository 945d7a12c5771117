"""Coolers in the page tables: any order of arrival gives the same; absence waits to be known."""

import random
from datetime import datetime, timedelta

import pytest

from fieldapp.domain.codes import new_code
from fieldapp.domain.facts import (
    BottleLocated,
    BottlePacked,
    BottleReceived,
    CoolerOpened,
    CoolerReopened,
    CoolerSealed,
    CrateCounted,
    EntryWithdrawn,
    HandoverOffered,
    HandoverStated,
    ReceiptStated,
    RoundChanged,
)
from fieldapp.projections import crates, custody
from tests.counter import Node
from tests.nodes import page_tables
from tests.projections.test_order import entries_of, tables_after

ONE, TWO = "C-000001", "C-000002"


def packed(node: Node, visit: str, cooler: str = ONE, box: str = "3") -> BottlePacked:
    return BottlePacked(bottle=node.codes[visit], cooler=cooler, route="north", box=box)


def sealed(cooler: str = ONE, seal: str = "88 214", count: int = 1, box: str = "3"):
    return CoolerSealed(cooler=cooler, route="north", box=box, seals=(seal,), count=count)


def offered(cooler: str = ONE, seal: str = "88 214", count: int = 1) -> HandoverOffered:
    return HandoverOffered(cooler=cooler, route="north", seals=(seal,), count=count, set="")


def opened(cooler: str = ONE, seal: str = "88 214", count: int = 1) -> CoolerOpened:
    return CoolerOpened(cooler=cooler, seal_read=(seal,), whole=True, count=count)


def received(node: Node, visit: str, cooler: str = ONE) -> BottleReceived:
    return BottleReceived(bottle=node.codes[visit], outcome="accepted", cooler=cooler)


def row(node: Node, cooler: str = ONE):
    with node.pages() as pages:
        return crates.cooler(pages, cooler)


def open_now(node: Node) -> list[tuple[str, str]]:
    with node.pages() as pages:
        return [(one["kind"], one["about"]) for one in pages.findings(node.clock.at)]


def awaited(node: Node, kind: str) -> datetime:
    with node.pages() as pages:
        (found,) = pages.rows("SELECT opens_at FROM p_finding WHERE kind = ?", (kind,))
    return datetime.fromisoformat(found["opens_at"])


@pytest.fixture
def filled(node: Node) -> Node:
    for visit in ("Q-0401", "Q-0402", "Q-0403"):
        node.fill(visit)
        node.clock.pass_by(minutes=20)
    return node


def test_a_cooler_has_a_row_with_its_bottles_seals_and_hands(filled):
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402"), by="sampler-1")
    filled.record(sealed(count=2), offered(count=2), by="sampler-1")
    filled.record(
        HandoverStated(cooler=ONE, route="north", waybill="WB-7", name="N. Carrier"), by="sampler-1"
    )
    found = row(filled)
    assert (found["state"], found["box"], found["route"]) == ("relinquished", "3", "north")
    assert found["bottles"] == sorted([filled.codes["Q-0401"], filled.codes["Q-0402"]])
    assert found["seals"] == ["88 214"]
    assert found["waybill"] == "WB-7"
    assert (found["round"], found["day"]) == ("spring", "2027-05-04")
    assert filled.bottle("Q-0401")["cooler"] == ONE


def test_a_packing_taken_back_leaves_the_bottle_loose(filled):
    (entry,) = filled.record(packed(filled, "Q-0401"), by="sampler-1")
    assert row(filled) is not None
    filled.record(EntryWithdrawn(of=entry), by="sampler-1")
    assert row(filled) is None
    assert filled.bottle("Q-0401")["cooler"] == ""


def test_a_bottle_in_a_cooler_becomes_a_finding_when_that_cooler_came_without_it(filled):
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402"), by="sampler-1")
    filled.record(packed(filled, "Q-0403", TWO, "4"), by="sampler-1")
    filled.record(sealed(count=2), offered(count=2), by="sampler-1")
    assert open_now(filled) == []
    filled.record(opened(count=1))
    assert open_now(filled) == []
    filled.record(received(filled, "Q-0401"))
    assert open_now(filled) == [("filled-not-received", f"bottle:{filled.codes['Q-0402']}")]


def test_a_bottle_in_no_cooler_waits_until_every_cooler_of_its_route_came(filled):
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402", TWO, "4"), by="sampler-1")
    filled.record(
        sealed(), offered(), sealed(TWO, "88 219", box="4"), offered(TWO, "88 219"), by="sampler-1"
    )
    filled.record(opened(), received(filled, "Q-0401"))
    assert open_now(filled) == []
    filled.record(opened(TWO, "88 219"), received(filled, "Q-0402", TWO))
    assert open_now(filled) == [("filled-not-received", f"bottle:{filled.codes['Q-0403']}")]


def test_a_bottle_filled_after_the_last_seal_waits_for_its_due_time(node):
    node.fill("Q-0401")
    node.record(packed(node, "Q-0401"), sealed(), offered(), by="sampler-1")
    node.clock.pass_by(minutes=30)
    node.fill("Q-0402")
    node.record(opened(), received(node, "Q-0401"))
    assert open_now(node) == []
    assert awaited(node, "filled-not-received") > node.clock.at + timedelta(hours=23)
    node.clock.pass_by(hours=24)
    assert open_now(node) == [("filled-not-received", f"bottle:{node.codes['Q-0402']}")]


def test_a_bottle_said_to_be_broken_is_known_not_to_come(filled):
    broken = BottleLocated(bottle=filled.codes["Q-0403"], how="broken", route="north")
    filled.record(broken, by="sampler-1")
    assert open_now(filled) == [("filled-not-received", f"bottle:{filled.codes['Q-0403']}")]


def test_what_is_said_of_a_bottle_that_is_packed_later_is_said_no_more(filled):
    left = BottleLocated(bottle=filled.codes["Q-0403"], how="left-behind", route="north")
    filled.record(left, by="sampler-1")
    assert filled.bottle("Q-0403")["located"] == "left-behind"
    filled.record(packed(filled, "Q-0403"), by="sampler-1")
    assert filled.bottle("Q-0403")["located"] == ""


def test_a_bottle_that_arrived_in_another_cooler_is_one_finding(filled):
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402", TWO, "4"), by="sampler-1")
    filled.record(
        sealed(), offered(), sealed(TWO, "88 219", box="4"), offered(TWO, "88 219"), by="sampler-1"
    )
    filled.record(opened(count=2), received(filled, "Q-0401"), received(filled, "Q-0402"))
    filled.record(received(filled, "Q-0403"))
    with filled.pages() as pages:
        (found,) = pages.findings(filled.clock.at)
    assert (found["kind"], found["says"]) == ("other-cooler", {"packed": "4", "box": "3"})


def test_a_stated_receipt_counts_as_received_with_its_basis(filled):
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402"), by="sampler-1")
    code = filled.codes["Q-0401"]
    filled.record(ReceiptStated(cooler=ONE, numbers={code: "L-7"}, on="2027-05-04", basis="stated"))
    here = filled.bottle("Q-0401")
    assert (here["outcome"], here["receipt_basis"]) == ("accepted", "stated")
    assert here["laboratory_number"] == "L-7"
    with filled.pages() as pages:
        assert pages.by_number("L-7") == [code]
    assert filled.bottle("Q-0402")["outcome"] == ""
    found = open_now(filled)
    assert ("filled-not-received", f"bottle:{filled.codes['Q-0402']}") in found
    assert ("filled-not-received", f"bottle:{code}") not in found


def test_a_receipt_on_paper_and_one_at_the_bench_are_one_receipt(filled):
    code = filled.codes["Q-0401"]
    filled.record(packed(filled, "Q-0401"), by="sampler-1")
    filled.record(ReceiptStated(cooler=ONE, numbers={code: "L-7"}, on="2027-05-04"))
    filled.record(BottleReceived(bottle=code, outcome="accepted", laboratory_number="L-7"))
    assert "received-twice" not in [kind for kind, _ in open_now(filled)]
    filled.record(EntryWithdrawn(of=latest(filled, code, "bottle.received")))
    filled.record(BottleReceived(bottle=code, outcome="accepted", laboratory_number="L-9"))
    assert "received-twice" in [kind for kind, _ in open_now(filled)]


def latest(node: Node, code: str, kind: str) -> str:
    with node.pages() as pages:
        return [e.hash for e in pages.story(f"bottle:{code}") if e.fact.kind == kind][-1]


def test_the_day_is_counted_from_its_rows(filled):
    filled.record(packed(filled, "Q-0401"), by="sampler-1")
    with filled.pages() as pages:
        counts = crates.day_counts(pages, "north")
        assert [one["bottle"] for one in crates.loose(pages, "north")] == [
            filled.codes["Q-0402"],
            filled.codes["Q-0403"],
        ]
    assert counts == {
        "planned": 3, "filled": 3, "voided": 0, "empty": 0, "spares": 0, "packed": 1,
        "without": 0, "poured": 0,
    }  # fmt: skip


def test_a_door_is_asked_at_until_its_bottles_were_counted(filled):
    with filled.pages() as pages:
        assert [one["visit"] for one in crates.doors(pages, "north")] == [
            "Q-0401",
            "Q-0402",
            "Q-0403",
        ]
    counted = CrateCounted(visit="Q-0402", count=1, bottles=(filled.codes["Q-0402"],))
    filled.record(counted, packed(filled, "Q-0401"), by="sampler-1")
    with filled.pages() as pages:
        assert [one["visit"] for one in crates.doors(pages, "north")] == ["Q-0403"]


@pytest.fixture
def troubled(filled: Node) -> Node:
    """A day of two coolers on which nearly everything went wrong."""
    stranger = new_code()
    filled.record(packed(filled, "Q-0401"), packed(filled, "Q-0402"), by="sampler-1")
    filled.record(packed(filled, "Q-0402", TWO, "4"), sealed(), by="sampler-1")
    filled.record(
        CoolerReopened(cooler=ONE, route="north", broken=("88 214",), reason="one more"),
        sealed(seal="88 215"), sealed(TWO, "88 219", box="4"), offered(seal="88 215"),
        by="sampler-1",
    )  # fmt: skip
    filled.record(BottleLocated(bottle=filled.codes["Q-0403"], how="left-behind", route="north"))
    (mistake,) = filled.record(opened(seal="88 214", count=7))
    filled.record(EntryWithdrawn(of=mistake))
    filled.record(opened(seal="88 216", count=3), received(filled, "Q-0401"))
    filled.record(
        BottleReceived(bottle=stranger, outcome="held", cooler=ONE, reason="no record"),
        received(filled, "Q-0402"),
    )
    filled.record(opened(TWO, "88 219", count=1))
    filled.record(
        ReceiptStated(cooler=TWO, numbers={filled.codes["Q-0402"]: "L-1"}, on="2027-05-04")
    )
    return filled


def test_a_troubled_day_holds_what_can_go_wrong(troubled):
    troubled.clock.pass_by(hours=72)
    assert {kind for kind, _ in open_now(troubled)} >= {
        "seal-differs", "count-differs", "custody-gap", "other-cooler", "filled-not-received",
        "unknown-bottle",
    }  # fmt: skip


def test_any_order_of_arrival_gives_the_same_coolers_and_findings(troubled):
    entries, tables = entries_of(troubled.store), page_tables(troubled.store)
    assert len(tables["p_cooler"]) == 2
    for seed in range(40):
        order = random.Random(seed)
        shuffled = list(entries)
        order.shuffle(shuffled)
        size = order.choice([1, 4, 30])
        batches = [shuffled[n : n + size] for n in range(0, len(shuffled), size)]
        assert tables_after(batches) == tables, seed


@pytest.mark.parametrize(
    "kind", ["route.planned", "round.opened", "bottle.packed", "cooler.sealed"]
)
def test_what_a_cooler_hangs_on_may_come_last(troubled, kind):
    entries, tables = entries_of(troubled.store), page_tables(troubled.store)
    late = [one for one in entries if one.fields()["kind"] == kind]
    early = [one for one in entries if one.fields()["kind"] != kind]
    assert late
    assert tables_after([early, *[[one] for one in late]]) == tables


def test_a_round_whose_due_time_changes_moves_what_waits_for_it(filled):
    filled.record(packed(filled, "Q-0401"), sealed(), by="sampler-1")
    filled.record(opened(), received(filled, "Q-0401"))
    before = awaited(filled, "custody-gap")
    with filled.pages() as pages:
        given = pages.story("round:spring")[0].fact
    filled.record(RoundChanged.read({**given.data(), "due": "PT5H"}))
    assert before - awaited(filled, "custody-gap") == timedelta(hours=19)


def test_a_cooler_row_has_every_column_of_its_table(filled):
    filled.record(packed(filled, "Q-0401"), by="sampler-1")
    with filled.pages() as pages:
        assert custody.boxes_of(pages.db, [ONE]) == {ONE: "3"}
        assert custody.boxes_of(pages.db, []) == {}
