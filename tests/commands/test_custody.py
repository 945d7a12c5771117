"""The crate and its coolers: what is barred, what is recorded all the same, what is taken back."""

from datetime import timedelta

import pytest

from fieldapp.commands import crate, custody, receipts
from fieldapp.domain import codes
from fieldapp.domain.codes import BadCode
from fieldapp.domain.custody import set_hash
from fieldapp.domain.errors import StepOver, Unknown
from fieldapp.domain.facts import BottleIssued, RoutePlanned
from fieldapp.projections import crates
from tests.counter import Node

ROUTE, SAMPLER, CLERK = "north", "sampler-1", "clerk-1"
VISITS = ("Q-0401", "Q-0402", "Q-0403")


@pytest.fixture
def filled(node: Node) -> Node:
    for visit in VISITS:
        node.fill(visit)
    return node


def press(node: Node, command, *given, by: str = SAMPLER, **named):
    return node.decide(lambda p, r: command(p, r, *given, **named), by=by)


def undo(node: Node, command, subject: str, of: str, by: str):
    """Take a press back as that person."""
    return node.decide(lambda p, r: command(p, r, subject, of=of, by=by), by=by)


def coolers(node: Node):
    with node.pages() as pages:
        return crates.coolers(pages, route=ROUTE)


def pack(node: Node, *visits: str, box: str = "3", **named):
    return press(
        node, crate.pack, ROUTE, box=box, codes=[node.codes[one] for one in visits], **named
    )


def sealed(node: Node, *visits: str, box: str = "3", seal: str = "88 214") -> str:
    """Pack those visits' bottles into a box, say of the rest that they stay, and seal it."""
    pack(node, *visits, box=box)
    with node.pages() as pages:
        rest = crate.unplaced(pages, ROUTE)
    for one in rest:
        press(node, crate.locate, ROUTE, bottle=one["bottle"], how="with-me")
    cooler = next(one["cooler"] for one in coolers(node) if one["box"] == box)
    press(node, custody.seal, cooler, seals=[seal], count=len(visits))
    return str(cooler)


def facts(node: Node, kind: str):
    with node.pages() as pages:
        rows = pages.rows("SELECT hash FROM p_fact WHERE kind = ? ORDER BY rowid", (kind,))
        return [pages.fact(row["hash"], private=True).fact for row in rows]


# packing


def test_all_in_the_crate_go_into_one_cooler_in_one_press(filled):
    press(filled, crate.pack, ROUTE, box="3")
    (cooler,) = coolers(filled)
    assert cooler["bottles"] == sorted(filled.codes.values())
    assert cooler["cooler"].startswith("C-")
    assert (cooler["box"], cooler["state"]) == ("3", "packing")


def test_a_scan_goes_into_the_one_open_cooler_without_naming_the_box_again(filled):
    pack(filled, "Q-0401")
    pack(filled, "Q-0402", box="")
    (cooler,) = coolers(filled)
    assert cooler["packed"] == 2


def test_a_second_scan_of_the_same_bottle_records_nothing(filled):
    pack(filled, "Q-0401")
    assert pack(filled, "Q-0401") == ()


def test_a_bottle_moves_between_open_coolers(filled):
    pack(filled, "Q-0401", "Q-0402")
    pack(filled, "Q-0402", box="4")
    assert {one["box"]: one["packed"] for one in coolers(filled)} == {"3": 1, "4": 1}


def test_without_a_box_and_without_an_open_cooler_the_box_is_asked_for(filled):
    with pytest.raises(crate.BoxMissing):
        pack(filled, "Q-0401", box=" ")
    pack(filled, "Q-0401", box="3")
    pack(filled, "Q-0402", box="4")
    with pytest.raises(crate.BoxMissing):
        pack(filled, "Q-0403", box="")


def test_a_sealed_box_takes_no_bottle_and_neither_gives_one(filled):
    sealed(filled, "Q-0401")
    with pytest.raises(crate.BoxClosed):
        pack(filled, "Q-0402")
    with pytest.raises(crate.InSealedCooler):
        pack(filled, "Q-0401", box="4")


def test_the_next_load_of_a_box_that_was_handed_over_has_an_id_of_its_own(filled):
    first = sealed(filled, "Q-0401")
    press(filled, custody.relinquish, first, to="night-box")
    pack(filled, "Q-0402")
    assert len({one["cooler"] for one in coolers(filled) if one["box"] == "3"}) == 2


def test_a_bottle_without_water_is_barred_until_somebody_says_that_it_is_filled(node):
    with pytest.raises(crate.BottleEmpty):
        pack(node, "Q-0401")
    pack(node, "Q-0401", already=True)
    assert coolers(node)[0]["packed"] == 1


def test_a_right_code_that_this_device_does_not_know_is_taken(filled):
    stranger = codes.new_code()
    press(filled, crate.pack, ROUTE, box="3", codes=[stranger])
    assert coolers(filled)[0]["bottles"] == [stranger]


def test_what_is_no_code_is_refused(filled):
    with pytest.raises(BadCode):
        press(filled, crate.pack, ROUTE, box="3", codes=["hello"])


def test_nothing_is_left_to_pack_when_all_have_their_place(filled):
    press(filled, crate.pack, ROUTE, box="3")
    with pytest.raises(crate.NothingToPack):
        press(filled, crate.pack, ROUTE, box="3")


def test_all_in_the_crate_leaves_out_what_is_said_to_be_elsewhere(filled):
    press(filled, crate.locate, ROUTE, bottle=filled.codes["Q-0403"], how="left-behind")
    press(filled, crate.pack, ROUTE, box="3")
    assert coolers(filled)[0]["packed"] == 2


def test_a_route_that_nobody_planned_is_unknown(filled):
    with pytest.raises(Unknown):
        press(filled, crate.pack, "nowhere", box="3")


# the seal


def test_a_seal_counts_the_day_and_puts_on_its_numbers(filled):
    press(filled, crate.pack, ROUTE, box="3")
    (cooler,) = coolers(filled)
    press(filled, custody.seal, cooler["cooler"], seals=["88 214", "", "88  215"], count=3)
    (counted,) = facts(filled, "crate.counted")
    (put_on,) = facts(filled, "cooler.sealed")
    assert (counted.route, counted.count, len(counted.bottles)) == (ROUTE, 3, 3)
    assert (put_on.seals, put_on.count) == (("88 214", "88 215"), 3)


def test_a_filled_bottle_in_no_cooler_bars_the_seal_until_somebody_says_where_it_is(filled):
    pack(filled, "Q-0401", "Q-0402")
    (cooler,) = coolers(filled)
    with pytest.raises(custody.BottlesLoose) as barred:
        press(filled, custody.seal, cooler["cooler"], seals=["88 214"], count=2)
    assert barred.value.values["codes"] == [filled.codes["Q-0403"]]
    press(filled, crate.locate, ROUTE, bottle=filled.codes["Q-0403"], how="left-behind", where="x")
    press(filled, custody.seal, cooler["cooler"], seals=["88 214"], count=2)
    assert coolers(filled)[0]["state"] == "sealed"


def test_a_seal_that_is_on_already_is_recorded_whatever_stands_against_it(filled):
    pack(filled, "Q-0401")
    (cooler,) = coolers(filled)
    press(filled, custody.seal, cooler["cooler"], seals=["88 214"], count=7, already=True)
    (put_on,) = facts(filled, "cooler.sealed")
    assert put_on.count == 7


def test_a_count_that_is_not_the_records_is_asked_about(filled):
    press(filled, crate.pack, ROUTE, box="3")
    with pytest.raises(custody.CountOther) as barred:
        press(filled, custody.seal, coolers(filled)[0]["cooler"], seals=["88 214"], count=2)
    assert barred.value.values == {"counted": 2, "packed": 3}


@pytest.mark.parametrize("seals", [[], ["", "  "], ["-"]])
def test_a_cooler_is_not_sealed_without_a_number(filled, seals):
    press(filled, crate.pack, ROUTE, box="3")
    with pytest.raises(custody.SealMissing):
        press(filled, custody.seal, coolers(filled)[0]["cooler"], seals=seals, count=3)


def test_a_seal_cannot_be_on_two_coolers_nor_used_again_after_it_was_broken(filled):
    first = sealed(filled, "Q-0401")
    pack(filled, "Q-0402", "Q-0403", box="4")
    second = next(one["cooler"] for one in coolers(filled) if one["box"] == "4")
    with pytest.raises(custody.SealUsed):
        press(filled, custody.seal, second, seals=["88-214"], count=2)
    press(filled, custody.reopen, first, reason="one more", seals=["88 219"])
    with pytest.raises(custody.SealUsed):
        press(filled, custody.seal, second, seals=["88 214"], count=2)


def test_a_sealed_cooler_is_not_sealed_again(filled):
    cooler = sealed(filled, *VISITS)
    with pytest.raises(StepOver):
        press(filled, custody.seal, cooler, seals=["88 219"], count=3)


def test_a_cooler_without_a_bottle_is_not_sealed(filled):
    pack(filled, "Q-0401")
    empty = coolers(filled)[0]["cooler"]
    pack(filled, "Q-0401", box="4")
    with pytest.raises(Unknown):
        press(filled, custody.seal, empty, seals=["88 214"], count=0)


# reopening


def test_reopening_keeps_the_old_number_broken_with_its_reason_and_takes_the_new_one(filled):
    cooler = sealed(filled, *VISITS)
    press(filled, custody.reopen, cooler, reason=" one rolled under the seat ", seals=["88 219"])
    (opened,) = facts(filled, "cooler.reopened")
    assert (opened.broken, opened.reason) == (("88 214",), "one rolled under the seat")
    (row,) = coolers(filled)
    assert (row["state"], row["seals"], row["broken"]) == ("sealed", ["88 219"], ["88 214"])


def test_a_reopened_cooler_takes_bottles_and_a_new_seal(filled):
    cooler = sealed(filled, "Q-0401", "Q-0402")
    press(filled, custody.reopen, cooler, reason="one more")
    pack(filled, "Q-0403")
    press(filled, custody.seal, cooler, seals=["88 219"], count=3)
    assert coolers(filled)[0]["packed"] == 3


def test_a_seal_is_not_broken_without_a_reason_nor_where_there_is_none(filled):
    cooler = sealed(filled, *VISITS)
    with pytest.raises(custody.WhyMissing):
        press(filled, custody.reopen, cooler, reason="  ")
    press(filled, custody.reopen, cooler, reason="one more")
    with pytest.raises(custody.NotSealed):
        press(filled, custody.reopen, cooler, reason="again")


# handing over


def test_a_handover_names_seals_count_and_the_hash_of_the_set(filled):
    cooler = sealed(filled, *VISITS)
    press(filled, custody.relinquish, cooler, to="courier", waybill="WB-7", name="N. Carrier")
    (given,) = facts(filled, "handover.offered")
    (taken,) = facts(filled, "handover.stated")
    assert (given.seals, given.count, given.to) == (("88 214",), 3, "courier")
    assert given.set == set_hash(filled.codes.values())
    assert (taken.waybill, taken.name) == ("WB-7", "N. Carrier")
    assert coolers(filled)[0]["state"] == "relinquished"


def test_the_carriers_name_stays_out_of_the_signed_body(filled):
    cooler = sealed(filled, *VISITS)
    press(filled, custody.relinquish, cooler, to="laboratory", name="N. Carrier")
    with filled.pages() as pages:
        bodies = pages.db.execute("SELECT body FROM entry").fetchall()
    assert not any(b"N. Carrier" in bytes(row[0]) for row in bodies)


def test_a_night_box_needs_no_name(filled):
    cooler = sealed(filled, *VISITS)
    press(filled, custody.relinquish, cooler, to="night-box")
    assert facts(filled, "handover.stated") == []


def test_a_courier_is_named_or_his_waybill_is(filled):
    cooler = sealed(filled, *VISITS)
    with pytest.raises(custody.WaybillMissing):
        press(filled, custody.relinquish, cooler, to="courier")


def test_an_unsealed_cooler_is_not_handed_over_unless_it_is_gone_already(filled):
    press(filled, crate.pack, ROUTE, box="3")
    cooler = coolers(filled)[0]["cooler"]
    with pytest.raises(custody.NotSealed):
        press(filled, custody.relinquish, cooler, to="laboratory")
    press(filled, custody.relinquish, cooler, to="laboratory", already=True)
    assert coolers(filled)[0]["state"] == "relinquished"


def test_a_cooler_is_handed_over_once(filled):
    cooler = sealed(filled, *VISITS)
    press(filled, custody.relinquish, cooler, to="night-box")
    with pytest.raises(StepOver):
        press(filled, custody.relinquish, cooler, to="laboratory")


def test_nobody_hands_over_to_somebody_unheard_of(filled):
    with pytest.raises(Unknown):
        press(filled, custody.relinquish, sealed(filled, *VISITS), to="the moon")


# taking back


def test_the_last_press_is_taken_back_whole(filled):
    *_, entry = press(filled, crate.pack, ROUTE, box="3")
    undo(filled, crate.take_back, ROUTE, entry, SAMPLER)
    assert coolers(filled) == []


def test_an_earlier_press_or_another_hands_is_not_taken_back(filled):
    (first,) = pack(filled, "Q-0401")
    filled.clock.pass_by(seconds=11)
    (second,) = pack(filled, "Q-0402")
    with pytest.raises(StepOver):
        undo(filled, crate.take_back, ROUTE, first, SAMPLER)
    with pytest.raises(StepOver):
        undo(filled, crate.take_back, ROUTE, second, "sampler-2")
    with pytest.raises(Unknown):
        undo(filled, crate.take_back, ROUTE, "x" * 43, SAMPLER)


def test_for_ten_seconds_a_press_is_taken_back_though_another_followed(filled):
    (first,) = pack(filled, "Q-0401")
    pack(filled, "Q-0402")
    undo(filled, crate.take_back, ROUTE, first, SAMPLER)
    assert coolers(filled)[0]["bottles"] == [filled.codes["Q-0402"]]


def test_a_door_is_counted_with_what_the_record_expects(filled):
    press(filled, crate.count_door, "Q-0401", count=2)
    (counted,) = facts(filled, "crate.counted")
    assert (counted.visit, counted.count) == ("Q-0401", 2)
    assert counted.bottles == (filled.codes["Q-0401"],)


# a receipt on paper


def state(node: Node, cooler: str, numbers: dict[str, str], **named):
    given = {"on": "2027-05-04", "name": "Q. Receiver", **named}
    return press(node, receipts.state_receipt, cooler, numbers=numbers, by=CLERK, **given)


def test_a_receipt_is_stated_with_day_name_numbers_and_document(filled):
    cooler = sealed(filled, *VISITS)
    numbers = {code: f" L-{n} " for n, code in enumerate(sorted(filled.codes.values()))}
    sheet = receipts.Document("ab" * 32, 400, "application/pdf")
    state(filled, cooler, numbers, document=sheet)
    (stated,) = facts(filled, "receipt.stated")
    assert (stated.on, stated.name, stated.basis) == ("2027-05-04", "Q. Receiver", "stated")
    assert stated.blobs() == ({"h": "ab" * 32, "n": 400, "t": "application/pdf"},)
    assert set(stated.numbers.values()) == {"L-0", "L-1", "L-2"}
    assert {filled.bottle(visit)["outcome"] for visit in VISITS} == {"accepted"}


def test_a_receipt_is_stated_once(filled):
    cooler = sealed(filled, *VISITS)
    state(filled, cooler, {filled.codes["Q-0401"]: ""})
    with pytest.raises(StepOver):
        state(filled, cooler, {filled.codes["Q-0401"]: ""})


def test_a_receipt_names_who_signed_and_at_least_one_bottle(filled):
    cooler = sealed(filled, *VISITS)
    with pytest.raises(receipts.NobodyNamed):
        state(filled, cooler, {filled.codes["Q-0401"]: ""}, name=" ")
    with pytest.raises(receipts.NothingCame):
        state(filled, cooler, {})
    with pytest.raises(receipts.NotThatLate):
        state(filled, cooler, {filled.codes["Q-0401"]: ""}, on="2027-05-05")


def test_one_number_of_the_laboratory_stands_on_one_bottle(filled):
    cooler = sealed(filled, "Q-0401", "Q-0402")
    one, two = filled.codes["Q-0401"], filled.codes["Q-0402"]
    with pytest.raises(receipts.NumberTwice):
        state(filled, cooler, {one: "L-7", two: "L-7"})
    filled.accept("Q-0403", "L-8")
    with pytest.raises(receipts.NumberTwice):
        state(filled, cooler, {one: "L-8"})


def test_a_stated_receipt_is_taken_back_until_the_next_press_and_for_ten_seconds(filled):
    cooler = sealed(filled, *VISITS)
    (entry,) = state(filled, cooler, {filled.codes["Q-0401"]: ""})
    with pytest.raises(StepOver):
        undo(filled, receipts.take_back, cooler, entry, "coordinator-1")
    filled.clock.at += timedelta(minutes=5)
    undo(filled, receipts.take_back, cooler, entry, CLERK)
    assert filled.bottle("Q-0401")["outcome"] == ""


def test_a_stated_receipt_stays_once_something_followed(filled):
    cooler = sealed(filled, *VISITS)
    (entry,) = state(filled, cooler, {filled.codes["Q-0401"]: ""})
    filled.accept("Q-0402")
    filled.clock.at += timedelta(minutes=1)
    with pytest.raises(StepOver):
        undo(filled, receipts.take_back, cooler, entry, CLERK)


def test_a_spare_that_was_filled_is_among_the_loose(filled):
    spare = codes.new_code()
    filled.record(BottleIssued(bottle=spare, round="spring", route=ROUTE))
    with filled.pages() as pages:
        assert spare not in [one["bottle"] for one in crates.loose(pages, ROUTE)]
        assert crates.day_counts(pages, ROUTE)["spares"] == 1


def test_two_routes_keep_their_boxes_apart(filled):
    filled.record(
        RoutePlanned(route="south", round="spring", title="S", day="2027-05-05", sampler=SAMPLER)
    )
    pack(filled, "Q-0401")
    press(filled, crate.pack, "south", box="3", codes=[codes.new_code()])
    with filled.pages() as pages:
        assert len(crates.coolers(pages)) == 2
