"""Corrections: what may be corrected, by whom; nothing moves in time, and a chain has one end."""

from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest

from fieldapp.commands import bench, corrections, drawing, kitchen
from fieldapp.commands.asked import NotYet, StrangeAnswer
from fieldapp.commands.correctable import (
    CORRECTABLE,
    NotCorrectable,
    NumberInUse,
    VolumeOutOfRange,
)
from fieldapp.commands.corrections import (
    CorrectedSince,
    CorrectionUnsaid,
    NothingDiffers,
    NotYoursToCorrect,
)
from fieldapp.domain.errors import Unknown
from fieldapp.domain.facts import EntryCorrected, PersonListed
from fieldapp.domain.facts.base import KINDS, fields_of
from fieldapp.domain.recorded import Recorded
from tests.tap import BLANK, OTHER, SAMPLER, VISIT, Tap

COLLEAGUE, COORDINATOR, CLERK = "sampler-2", "coordinator-1", "clerk-1"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "node")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    made.record(
        PersonListed(person=COLLEAGUE, roles=("sampler",), name="Imaginary Colleague"),
        PersonListed(person=COORDINATOR, roles=("coordinator",), name="Imaginary Coordinator"),
    )
    yield made
    made.store.close()


def entry(tap: Tap, visit: str, kind: str) -> Recorded:
    """Return the entry of that kind that stands, with its private part."""
    with tap.pages() as pages:
        (found,) = [e for e in pages.recorded(visit) if e.fact.kind == kind]
        whole = pages.fact(found.hash, private=True)
    assert whole is not None
    return whole


def correct(
    tap: Tap, of: Recorded, by: str = SAMPLER, reason: str = "looked again", **given: Any
) -> Any:
    """Correct an entry; ``done_at`` is its time, the rest its new values."""
    done_at = given.pop("done_at", None)
    return tap.decide(
        lambda p, r: corrections.correct(
            p, r, of=of.hash, changes=given, reason=reason, by=by, done_at=done_at
        ),
        by=by,
    )


def drawn(tap: Tap) -> Recorded:
    tap.begin(VISIT)
    tap.finish(VISIT)
    tap.clock.pass_by(hours=3)
    return entry(tap, VISIT, "bottle.filled")


# nothing moves


def test_a_corrected_fill_keeps_its_time_its_place_and_the_stand(tap: Tap):
    filled = drawn(tap)
    before = tap.standing(VISIT)
    correct(tap, filled, fill="below")

    now = entry(tap, VISIT, "bottle.filled")
    assert (now.fact.fill, now.done_at, now.replaces) == ("below", filled.at, filled.hash)
    after = tap.standing(VISIT)
    assert after.stand == before.stand
    assert [one.kind for one in after.deviations] == ["fill-below"]


def test_a_use_told_before_the_draw_and_corrected_after_it_still_came_before(tap: Tap):
    drawn(tap)
    used = entry(tap, VISIT, "water.used")
    at = used.done_at - timedelta(hours=5)
    correct(tap, used, exact="at", at=at)

    kinds = [one.kind for one in tap.standing(VISIT).deviations]
    assert kinds == ["stand-short"]  # not tap-used-in-stand: nobody told of it afterwards


def test_an_answer_corrected_after_the_draw_stands_where_it_was_given(tap: Tap):
    drawn(tap)
    with tap.pages() as pages:
        answers = [e for e in pages.recorded(VISIT) if e.fact.kind == "question.answered"]
    asked = next(e for e in answers if e.fact.question == "aerator")
    correct(tap, asked, answer="cleaned")

    assert [one.kind for one in tap.standing(VISIT).deviations] == ["aerator-cleaned"]
    assert tap.standing(VISIT).answers["aerator"] == "cleaned"


def test_another_time_is_stated_by_the_sampler(tap: Tap):
    filled = drawn(tap)
    at = filled.at - timedelta(minutes=20)
    correct(tap, filled, done_at=at)

    now = entry(tap, VISIT, "bottle.filled")
    assert (now.done_at, now.fact.basis, now.fact.told_by) == (at, "stated", "sampler")


# chains


def test_a_correction_of_a_correction_replaces_it(tap: Tap):
    first = drawn(tap)
    correct(tap, first, fill="below")
    second = entry(tap, VISIT, "bottle.filled")
    correct(tap, second, fill="over")

    now = entry(tap, VISIT, "bottle.filled")
    assert (now.fact.fill, now.done_at) == ("over", first.at)
    with tap.pages() as pages:
        assert [e.fact.fill for e in pages.corrections(now.hash)] == ["below", "over"]
        assert pages.findings(tap.clock.at) == []


def test_what_was_corrected_since_is_not_corrected_again(tap: Tap):
    first = drawn(tap)
    correct(tap, first, fill="below")
    with pytest.raises(CorrectedSince):
        correct(tap, first, fill="over")


def test_two_devices_correct_the_same_entry_and_one_corrects_further_it_is_one_finding(tap: Tap):
    first = drawn(tap)
    other = {**first.fact.data(), "fill": "spilled"}
    correct(tap, first, fill="below")
    # as it came from a device that had not heard of it
    tap.record(EntryCorrected(of=first.hash, kind_="bottle.filled", data_=other), by=COORDINATOR)
    with tap.pages() as pages:
        mine = next(e for e in pages.corrections(first.hash) if e.fact.fill == "below")
    correct(tap, mine, fill="over")

    with tap.pages() as pages:
        found = [one for one in pages.findings(tap.clock.at) if one["kind"] == "corrected-twice"]
    assert [one["about"] for one in found] == [f"entry:{first.hash}"]
    assert len(found[0]["evidence"]) == 2


# the private part


def test_a_corrected_name_is_private_and_the_reason_is_its_own(tap: Tap):
    drawn(tap)
    signed = entry(tap, VISIT, "visit.signed")
    (made,) = correct(tap, signed, name="Wilhelmet Asterby", reason="misspelt")

    assert entry(tap, VISIT, "visit.signed").fact.name == "Wilhelmet Asterby"
    with tap.pages() as pages:
        assert pages.reason(made) == "misspelt"
        assert "Asterby" not in str(pages.fact(made).fact.data())


def test_a_correction_of_the_time_keeps_the_name(tap: Tap):
    drawn(tap)
    signed = entry(tap, VISIT, "visit.signed")
    correct(tap, signed, done_at=signed.at - timedelta(minutes=1))

    assert entry(tap, VISIT, "visit.signed").fact.name == signed.fact.name != ""


# bottles


def test_a_fill_corrected_to_a_spare_binds_the_spare(tap: Tap):
    filled, spare = drawn(tap), tap.spare()
    correct(tap, filled, bottle=spare)

    with tap.pages() as pages:
        row, was = pages.bottle(spare), pages.bottle(tap.codes[VISIT])
    assert (row["filled"], row["purpose"], row["visit"]) == (1, "compliance", VISIT)
    assert was["filled"] == 0


def test_two_fills_corrected_to_each_others_bottle_are_swapped(tap: Tap):
    for visit in (VISIT, OTHER):
        tap.begin(visit)
        tap.finish(visit)
    for visit, of in ((VISIT, OTHER), (OTHER, VISIT)):
        correct(tap, entry(tap, visit, "bottle.filled"), bottle=tap.codes[of])

    with tap.pages() as pages:
        assert [one["kind"] for one in pages.findings(tap.clock.at)] == ["bottles-swapped"]


# refused


@pytest.mark.parametrize(
    ("given", "rule"),
    [
        ({"fill": "to-the-brim"}, StrangeAnswer),
        ({"volume_ml": -1}, VolumeOutOfRange),
        ({"volume_ml": 20_001}, VolumeOutOfRange),
        ({"water_lot": "LW-1"}, NotCorrectable),  # the tap's own water has no lot
        ({"bottle": "00000000000"}, Unknown),
        ({"draw": 2}, NotCorrectable),
        ({"fill": "line"}, NothingDiffers),
        ({}, NothingDiffers),
        ({"fill": "below", "reason": "  "}, CorrectionUnsaid),
        ({"fill": "below", "by": COLLEAGUE}, NotYoursToCorrect),
        ({"fill": "below", "by": CLERK}, NotYoursToCorrect),
        ({"fill": "below", "by": "nobody"}, NotYoursToCorrect),
    ],
)
def test_a_bad_correction_records_nothing(tap: Tap, given, rule):
    filled = drawn(tap)
    with pytest.raises(rule):
        correct(tap, filled, **given)
    assert entry(tap, VISIT, "bottle.filled").hash == filled.hash


def test_nothing_is_corrected_into_the_future(tap: Tap):
    filled = drawn(tap)
    with pytest.raises(NotYet):
        correct(tap, filled, done_at=tap.clock.at + timedelta(hours=1))


def test_a_last_use_is_not_corrected_to_a_time_after_it_was_told(tap: Tap):
    drawn(tap)
    used = entry(tap, VISIT, "water.used")
    with pytest.raises(NotYet):
        correct(tap, used, exact="at", at=used.at + timedelta(minutes=30))


def test_an_answer_is_corrected_to_one_that_was_offered(tap: Tap):
    drawn(tap)
    with tap.pages() as pages:
        asked = next(e for e in pages.recorded(VISIT) if e.fact.kind == "question.answered")
    with pytest.raises(StrangeAnswer):
        correct(tap, asked, answer="perhaps")


def test_the_coordinator_corrects_what_others_recorded(tap: Tap):
    correct(tap, drawn(tap), by=COORDINATOR, fill="below")
    assert entry(tap, VISIT, "bottle.filled").fact.fill == "below"


def test_a_deviation_and_what_the_office_planned_are_not_corrected(tap: Tap):
    drawn(tap)
    tap.press(kitchen.state_deviation, VISIT, kind="low-flow")
    for kind in ("deviation.stated", "visit.planned", "bottle.issued"):
        with pytest.raises(NotCorrectable):
            correct(tap, entry(tap, VISIT, kind), by=COORDINATOR, done_at=tap.clock.at)


def test_the_lot_of_a_blank_is_corrected(tap: Tap):
    codes = tap.add(
        BLANK, "first-litre", {"draw": 1, "purpose": "compliance"},
        {"draw": 2, "kind": "blank", "purpose": "blank"},
    )  # fmt: skip
    tap.begin(BLANK)
    tap.press(drawing.set_bottle, BLANK, code=codes[1])
    tap.press(drawing.fill, BLANK, fills={})
    tap.press(drawing.set_bottle, BLANK, code=codes[2])
    tap.press(drawing.blank, BLANK, water_lot="LW-1")
    with tap.pages() as pages:
        poured = next(e for e in pages.recorded(BLANK) if getattr(e.fact, "water_lot", ""))
    with pytest.raises(drawing.LotMissing):
        correct(tap, poured, water_lot=" ")
    correct(tap, poured, water_lot="LW-7")

    with tap.pages() as pages:
        assert "LW-7" in [getattr(e.fact, "water_lot", "") for e in pages.recorded(BLANK)]


def test_the_laboratorys_number_is_corrected_by_its_clerk_but_not_to_one_in_use(tap: Tap):
    for number, visit in enumerate((VISIT, OTHER), 1):
        tap.fill(visit)
        tap.decide(
            lambda p, r, code=tap.codes[visit], number=number: bench.receive(
                p, r, bottle=code, laboratory_number=f"W-{number}", counted=False
            )
        )
    with tap.pages() as pages:
        story = pages.story(f"bottle:{tap.codes[VISIT]}")
        received = next(e for e in story if e.fact.kind == "bottle.received")
    with pytest.raises(NumberInUse):
        correct(tap, received, by=CLERK, laboratory_number="W-2")
    correct(tap, received, by=CLERK, laboratory_number="W-9")

    with tap.pages() as pages:
        assert pages.by_number("W-9") == [tap.codes[VISIT]]
        assert pages.by_number("W-1") == []


def test_the_table_names_only_fields_that_are_there():
    for kind, allowed in CORRECTABLE.items():
        assert set(allowed.fields) <= set(fields_of(KINDS[kind])), kind
        assert KINDS[kind].done_by_a_person


def test_what_was_corrected_says_what_differs(tap: Tap):
    filled = drawn(tap)
    correct(tap, filled, fill="below", volume_ml=930)
    now = entry(tap, VISIT, "bottle.filled")

    assert corrections.differences(filled, now) == [
        ("fill", "line", "below"),
        ("volume_ml", "", 930),
    ]


def test_a_last_use_of_which_only_the_place_was_wrong_keeps_its_times(tap: Tap):
    drawn(tap)
    used = entry(tap, VISIT, "water.used")
    correct(tap, used, where="toilet")
    now = entry(tap, VISIT, "water.used").fact

    assert (now.where, now.from_, now.to) == ("toilet", used.fact.from_, used.fact.to)
