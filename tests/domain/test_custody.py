"""A cooler told from its facts: what is in it, which seal is on it, what never came out of it."""

import random
from datetime import timedelta

import pytest

from fieldapp.domain.custody import (
    UNPACKED_WITHIN,
    Load,
    gap_of,
    missing_at,
    new_cooler,
    plain_seal,
    same_seals,
    set_hash,
    tell,
)
from fieldapp.domain.facts import BottleLocated, HandoverStated, ReceiptStated
from fieldapp.domain.reconcile_coolers import about_cooler
from tests.custody import COOLER, FOUR, MORNING, ONE, OTHER, THREE, TWO, Record, ordinary


@pytest.fixture
def record() -> Record:
    return Record()


def kinds(record: Record, cooler: str = COOLER) -> list[str]:
    return [one.kind for one in about_cooler(record.told(cooler), box="3", day="2027-05-04")]


def test_a_cooler_goes_from_packing_to_the_laboratory(record):
    seen = []
    steps = [
        lambda: record.pack(ONE, TWO),
        lambda: record.seal("88 214"),
        lambda: record.reopen("88 214"),
        lambda: record.seal("88 219"),
        lambda: record.offer("88 219"),
        lambda: record.open("88 219"),
    ]
    for step in steps:
        step()
        seen.append(record.told().state)
    assert seen == ["packing", "sealed", "reopened", "sealed", "relinquished", "received"]
    assert record.told().seals == ("88 219",)
    assert record.told().broken == ("88 214",)


def test_a_cooler_that_was_reopened_after_the_handover_is_no_longer_handed_over(record):
    record.pack(ONE)
    record.seal("88 214")
    record.offer("88 214")
    record.reopen("88 214")
    assert record.told().state == "reopened"
    assert record.told().offer is None


def test_a_bottle_is_in_the_cooler_it_was_packed_into_last(record):
    record.pack(ONE, TWO)
    record.pack(TWO, cooler=OTHER)
    assert record.told().bottles == (ONE,)
    assert record.told(OTHER).bottles == (TWO,)


def test_the_standing_is_the_same_in_any_order_of_arrival(record):
    ordinary(record)
    record.receive(ONE, TWO)
    told = record.told()
    for seed in range(20):
        shuffled = list(record.entries)
        random.Random(seed).shuffle(shuffled)
        assert tell(COOLER, shuffled) == told
        assert about_cooler(tell(COOLER, shuffled)) == about_cooler(told)


def test_the_set_hash_is_of_the_bottles_whatever_their_order():
    assert set_hash([TWO, ONE]) == set_hash([ONE, TWO, ONE])
    assert set_hash([ONE]) != set_hash([ONE, TWO])
    # by hand: printf '0000000000A\n0000000000B' | sha256sum
    assert set_hash([ONE, TWO]).startswith("03429421db57")


def test_a_coolers_id_is_minted_from_the_alphabet_of_the_codes():
    assert new_cooler(lambda alphabet: alphabet[-1]) == "C-ZZZZZZ"
    assert len({new_cooler() for _ in range(50)}) == 50


@pytest.mark.parametrize(
    ("some", "others", "same"),
    [
        (["88 214"], ["88214"], True),
        (["a-7", "b-8"], ["B8", "A7"], True),
        (["88 214"], ["88 219"], False),
        (["88 214"], [], False),
        (["88 214", "88 215"], ["88 214"], False),
    ],
)
def test_seals_are_compared_by_letters_and_digits(some, others, same):
    assert same_seals(some, others) is same


def test_a_seal_is_plain_without_blanks_hyphens_and_case():
    assert plain_seal(" ab-88 214 ") == "AB88214"


# what is known to be empty


def test_a_cooler_is_known_to_be_empty_when_as_many_came_out_as_were_counted(record):
    ordinary(record, count=1)
    assert record.told().emptied_at == record.at + UNPACKED_WITHIN
    record.receive(ONE)
    assert record.told().emptied_at == record.at
    assert record.told().missing == (TWO,)


def test_an_opened_cooler_that_nobody_scans_is_known_to_be_empty_an_hour_later(record):
    ordinary(record)
    assert record.told().emptied_at == record.at + timedelta(hours=1)


def test_a_cooler_on_the_road_is_not_known_to_be_empty(record):
    record.pack(ONE)
    record.seal("88 214")
    assert record.told().emptied_at is None


def test_a_stated_receipt_says_what_came_and_so_what_did_not(record):
    record.fill(ONE, TWO)
    record.pack(ONE, TWO)
    record.add(ReceiptStated(cooler=COOLER, numbers={ONE: "L-7"}, on="2027-05-04"), log="central")
    assert record.told().missing == (TWO,)
    assert record.told().emptied_at == record.at
    assert record.told().state == "received"


def test_a_bottle_in_a_cooler_is_missed_when_that_cooler_is_empty():
    at = MORNING + timedelta(hours=3)
    assert missing_at(MORNING, Load(MORNING, at), [Load(MORNING, None)]) == at
    assert missing_at(MORNING, Load(MORNING, None), [Load(MORNING, at)]) is None


def test_a_bottle_in_no_cooler_is_missed_when_every_cooler_of_its_route_is_empty():
    first, last = MORNING + timedelta(hours=3), MORNING + timedelta(hours=4)
    sealed = MORNING + timedelta(hours=1)
    both = [Load(sealed, first), Load(sealed, last)]
    assert missing_at(MORNING, None, both) == last
    assert missing_at(MORNING, None, [*both, Load(sealed, None)]) is None
    assert missing_at(MORNING, None, []) is None


def test_a_bottle_filled_after_the_last_seal_may_still_be_packed():
    later = MORNING + timedelta(hours=2)
    assert missing_at(later, None, [Load(MORNING, later)]) is None


# findings


def test_an_ordinary_cooler_has_no_finding(record):
    ordinary(record)
    record.receive(ONE, TWO)
    assert kinds(record) == []


def test_another_seal_than_the_one_put_on_is_one_finding(record):
    ordinary(record, read="88 219")
    record.receive(ONE, TWO)
    (found,) = about_cooler(record.told(), box="3", day="2027-05-04")
    assert found.kind == "seal-differs"
    assert found.values["put_on"] == ["88 214"]
    assert found.values["read"] == ["88 219"]
    assert found.opens_at is None


def test_another_seal_that_is_broken_too_is_still_one_finding(record):
    ordinary(record, read="88 219", whole=False)
    assert kinds(record) == ["seal-differs"]


def test_no_seal_read_where_one_was_put_on_differs(record):
    ordinary(record, read="")
    assert kinds(record) == ["seal-differs"]


def test_after_reopening_the_new_number_is_the_one_that_must_agree(record):
    record.pack(ONE, TWO)
    record.seal("88 214")
    record.reopen("88 214")
    record.seal("88 219")
    record.offer("88 219")
    record.open("88-219")
    assert kinds(record) == []


def test_two_seals_agree_in_whatever_order_they_are_read(record):
    record.pack(ONE, TWO)
    record.seal("A 1", "A 2")
    record.offer("A 1", "A 2")
    record.open("a2", "a1")
    assert kinds(record) == []


def test_the_right_seal_broken_is_a_gap_from_the_handover_to_the_opening(record):
    ordinary(record, whole=False)
    gap = gap_of(record.told())
    assert gap is not None
    assert gap.why == "seal-broken"
    assert gap.since == record.told().offer.done_at
    assert gap.until == record.told().opening.done_at
    assert kinds(record) == ["custody-gap"]


def test_a_cooler_that_was_never_sealed_is_a_gap_once_its_record_could_be_here(record):
    record.pack(ONE, TWO)
    record.open(whole=False)
    (found,) = about_cooler(record.told(), due=timedelta(hours=24))
    assert found.kind == "custody-gap"
    assert found.values["why"] == "unsealed"
    assert found.opens_at == record.at + timedelta(hours=24)


def test_a_cooler_handed_over_without_a_seal_is_a_gap_at_once(record):
    record.pack(ONE, TWO)
    record.offer()
    record.open(whole=False)
    (found,) = about_cooler(record.told())
    assert found.values["why"] == "unsealed"
    assert found.opens_at is None


def test_a_sealed_cooler_that_nobody_handed_over_waits_for_the_record(record):
    record.pack(ONE, TWO)
    record.seal("88 214")
    record.open("88 214")
    (found,) = about_cooler(record.told())
    assert found.values["why"] == "not-relinquished"
    assert found.opens_at == record.at + timedelta(hours=48)


def test_who_opens_his_own_cooler_had_it_in_hand(record):
    record.pack(ONE, TWO)
    record.open(whole=False, by="sampler-1")
    assert kinds(record) == []
    record.seal("88 214")
    record.open("88 214", by="sampler-1")
    assert kinds(record) == []


def test_a_custodian_without_a_device_closes_the_gap(record):
    record.pack(ONE, TWO)
    record.seal("88 214")
    record.add(HandoverStated(cooler=COOLER, route="north", waybill="WB-7"))
    record.open("88 214")
    assert kinds(record) == []


def test_a_cooler_without_any_record_of_ours_has_no_finding(record):
    record.open("X-1", count=9)
    record.receive(ONE)
    assert kinds(record) == []


# counts


def test_a_count_that_differs_waits_while_bottles_are_still_coming_out(record):
    ordinary(record, count=1)
    (found,) = about_cooler(record.told())
    assert found.kind == "count-differs"
    assert found.opens_at == record.at + UNPACKED_WITHIN


def test_a_missing_bottle_alone_is_told_by_itself_and_not_by_the_count(record):
    ordinary(record, count=1)
    record.receive(ONE)
    assert record.told().missing == (TWO,)
    assert kinds(record) == []


def test_a_missing_bottle_that_was_never_filled_leaves_the_count_to_tell_it(record):
    record.fill(ONE)
    record.pack(ONE, TWO)
    record.seal("88 214")
    record.offer("88 214")
    record.open("88 214", count=1)
    record.receive(ONE)
    assert kinds(record) == ["count-differs"]


def test_more_bottles_than_the_record_has_is_a_finding_at_once_when_all_are_out(record):
    ordinary(record, count=3)
    record.receive(ONE, TWO, THREE)
    (found,) = about_cooler(record.told())
    assert found.kind == "count-differs"
    assert found.values == {"box": "", "day": "", "counted": 3, "packed": 2}
    assert found.opens_at == record.told().opening.done_at


def test_a_bottle_of_another_cooler_is_told_by_its_own_finding_and_by_no_count(record):
    record.fill(THREE, FOUR)
    record.pack(THREE, FOUR, cooler=OTHER)
    record.seal("77", cooler=OTHER)
    ordinary(record, count=3)
    record.receive(ONE, TWO, THREE)
    assert kinds(record) == []
    record.open("77", count=1, cooler=OTHER, by="sampler-1")
    record.receive(FOUR, cooler=OTHER)
    assert kinds(record, OTHER) == []
    assert record.told(OTHER).missing == ()


def test_fewer_scans_than_counted_leave_the_missing_ones_to_tell_it(record):
    # counted as packed, one of them never scanned: the count agrees, the bottle is missing
    ordinary(record)
    record.receive(ONE)
    assert kinds(record) == []
    assert record.told().missing == (TWO,)


def test_a_bottle_that_is_said_to_be_elsewhere_after_it_was_packed_is_in_no_cooler(record):
    record.pack(ONE, TWO)
    record.add(BottleLocated(bottle=TWO, how="elsewhere", route="north"))
    assert record.told().bottles == (ONE,)
    record.pack(TWO)
    assert record.told().bottles == (ONE, TWO)
