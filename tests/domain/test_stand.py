"""Stands as evidence, over changes of the clocks and clocks that were set."""

import zoneinfo
from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.stand import (
    Mark,
    Stand,
    between,
    earliest_draw,
    judge,
    latest_of,
    stated,
)
from fieldapp.domain.timetext import (
    AmbiguousLocalTime,
    BadDuration,
    BadTime,
    BadZone,
    NoSuchLocalTime,
    chips,
    format_utc,
    in_utc,
    parse_duration,
    parse_utc,
    to_utc,
)
from tests.check_values import named, values

SIX_HOURS = timedelta(hours=6)
EIGHTEEN_HOURS = timedelta(hours=18)
START = datetime(2031, 5, 4, 22, 0, tzinfo=UTC)


@pytest.fixture(autouse=True)
def _one_zone_database():
    # The machine's own database may be of another year than the package tzdata.
    zoneinfo.reset_tzpath(to=[])
    zoneinfo.ZoneInfo.clear_cache()
    yield
    zoneinfo.reset_tzpath()
    zoneinfo.ZoneInfo.clear_cache()


def hours(text):
    whole, minutes = text.split(":")
    return timedelta(hours=int(whole), minutes=int(minutes))


def mark(after="0:00", mono=None, boot="b1"):
    return Mark(START + hours(after), None if mono is None else round(mono * 60_000), boot)


# Over a change of the clocks


@pytest.mark.parametrize("value", values("stands"), ids=named)
def test_a_stand_over_a_change_of_the_clocks_lasts_as_long_as_the_water_stood(value):
    start = to_utc(value["start"], value["zone"])
    end = to_utc(value["end"], value["zone"], value.get("end_fold"))
    stand = stated(start, start, end)
    assert stand == Stand("stated", hours(value["elapsed"]), hours(value["elapsed"]))
    assert judge(stand, SIX_HOURS, EIGHTEEN_HOURS) == value["verdict"]


@pytest.mark.parametrize("value", values("stands"), ids=named)
def test_the_clock_faces_say_what_the_table_says(value):
    faces = datetime.fromisoformat(value["end"]) - datetime.fromisoformat(value["start"])
    assert faces == hours(value["faces"])


@pytest.mark.parametrize("value", values("stands"), ids=named)
def test_moments_that_carry_their_zone_are_not_reckoned_by_their_faces(value):
    zone = zoneinfo.ZoneInfo(value["zone"])
    start = datetime.fromisoformat(value["start"]).replace(tzinfo=zone)
    end = datetime.fromisoformat(value["end"]).replace(tzinfo=zone, fold=value.get("end_fold") or 0)
    clocked = between(Mark(start, None, "b1"), Mark(end, None, "b2"))
    assert clocked.shortest == clocked.longest == hours(value["elapsed"])


def test_a_time_that_no_clock_showed_is_refused():
    with pytest.raises(NoSuchLocalTime) as caught:
        to_utc("2026-03-08T02:30", "America/Boise")
    assert caught.value.values == {"local": "2026-03-08T02:30", "zone": "America/Boise"}
    with pytest.raises(NoSuchLocalTime):
        to_utc("2026-03-08T02:30", "America/Boise", fold=1)


def test_a_time_that_clocks_showed_twice_is_asked_with_both_moments():
    with pytest.raises(AmbiguousLocalTime) as caught:
        to_utc("2026-11-01T01:30", "America/Boise")
    assert caught.value.values["first"] == datetime(2026, 11, 1, 7, 30, tzinfo=UTC)
    assert caught.value.values["second"] == datetime(2026, 11, 1, 8, 30, tzinfo=UTC)


def test_the_answer_first_or_second_picks_the_moment():
    moments = [to_utc("2026-11-01T01:30", "America/Boise", fold) for fold in (0, 1)]
    assert moments[1] - moments[0] == timedelta(hours=1)


@pytest.mark.parametrize(
    ("start", "face"),
    [("2026-03-07T22:00", "05:00"), ("2026-10-31T22:00", "03:00")],
)
def test_the_earliest_draw_is_reckoned_in_utc(start, face):
    earliest = earliest_draw(to_utc(start, "America/Boise"), SIX_HOURS)
    assert earliest.utcoffset() == timedelta(0)
    assert f"{earliest.astimezone(zoneinfo.ZoneInfo('America/Boise')):%H:%M}" == face


def test_the_earliest_draw_after_a_start_that_carries_its_zone_is_reckoned_in_utc():
    start = datetime(2026, 3, 7, 22, 0, tzinfo=zoneinfo.ZoneInfo("America/Boise"))
    assert earliest_draw(start, SIX_HOURS) == datetime(2026, 3, 8, 11, 0, tzinfo=UTC)


def test_of_two_uses_the_second_half_past_one_is_the_later():
    boise = zoneinfo.ZoneInfo("America/Boise")
    first, second = (datetime(2026, 11, 1, 1, 30, tzinfo=boise, fold=fold) for fold in (0, 1))
    assert latest_of([second, first]) == datetime(2026, 11, 1, 8, 30, tzinfo=UTC)


def test_no_use_at_all_has_no_latest():
    assert latest_of([]) is None


# By the clocks of devices


def test_a_stand_within_one_boot_is_measured_by_the_counter():
    stand = between(mark(mono=100), mark("6:00", mono=100 + 360.5))
    assert stand == Stand("measured", timedelta(minutes=360.5), timedelta(minutes=360.5))


@pytest.mark.parametrize(("gap_s", "basis"), [(60, "measured"), (61, "clocked"), (-61, "clocked")])
def test_a_minute_between_clock_and_counter_is_the_most_that_passes_for_one_story(gap_s, basis):
    end = Mark(START + SIX_HOURS + timedelta(seconds=gap_s), 6 * 3_600_000, "b1")
    assert between(mark(mono=0), end).basis == basis


def test_a_clock_and_a_counter_that_differ_bracket_the_stand_and_the_sampler_is_asked():
    # 22:00 to 04:20 by the clock, 5:35 by the counter: 2700 s apart.
    stand = between(mark(mono=0), mark("6:20", mono=335))
    assert stand == Stand("clocked", hours("5:35"), hours("6:20"))
    assert judge(stand, SIX_HOURS) == "ask"


def test_a_clock_set_back_an_hour_brackets_the_stand_from_the_other_side():
    stand = between(mark(mono=0), mark("5:30", mono=390))
    assert (stand.shortest, stand.longest) == (hours("5:30"), hours("6:30"))


@pytest.mark.parametrize(
    ("start", "end"),
    [
        (mark(mono=1000, boot="b1"), mark("6:10", mono=5, boot="b2")),
        (mark(mono=None), mark("6:10", mono=370)),
        (mark(mono=0), mark("6:10", mono=None)),
    ],
)
def test_after_another_boot_or_without_a_counter_only_the_clocks_know(start, end):
    assert between(start, end) == Stand("clocked", hours("6:10"), hours("6:10"))


def test_clocks_that_may_be_out_widen_the_stand_to_both_sides():
    stand = between(mark(boot="b1"), mark("6:10", boot="b2"), offset_bound=timedelta(minutes=12))
    assert stand == Stand("clocked", hours("5:58"), hours("6:22"))
    assert judge(stand, SIX_HOURS) == "ask"


def test_clocks_that_may_be_out_do_not_touch_what_the_counter_measured():
    bound = timedelta(minutes=12)
    assert between(mark(mono=0), mark("6:10", mono=370), offset_bound=bound).basis == "measured"


def test_an_end_before_its_start_proves_nothing_and_is_asked():
    stand = between(mark("8:00", boot="b1"), mark("1:00", boot="b2"))
    assert stand == Stand("clocked", timedelta(0), timedelta(0), contradictory=True)
    assert judge(stand, SIX_HOURS) == "ask"


# By what people say


def test_a_last_use_between_two_times_allows_a_shortest_and_a_longest_stand():
    stand = stated(START, START + hours("0:30"), START + hours("6:15"))
    assert stand == Stand("stated", hours("5:45"), hours("6:15"))
    assert judge(stand, SIX_HOURS) == "ask"


def test_the_two_times_may_be_said_in_either_order():
    end = START + hours("7:00")
    assert stated(START + hours("0:30"), START, end) == stated(START, START + hours("0:30"), end)


def test_a_use_that_may_lie_after_the_draw_leaves_no_shortest_stand():
    stand = stated(START, START + hours("7:00"), START + hours("6:30"))
    assert stand == Stand("stated", timedelta(0), hours("6:30"))


def test_a_use_said_to_lie_after_the_draw_is_asked():
    stand = stated(START + hours("2:00"), START + hours("3:00"), START)
    assert stand.contradictory
    assert judge(stand, SIX_HOURS) == "ask"


def test_a_clock_that_may_be_out_widens_what_a_person_said():
    stand = stated(START, START, START + hours("6:05"), offset_bound=timedelta(minutes=10))
    assert (stand.shortest, stand.longest) == (hours("5:55"), hours("6:15"))


# The verdict


def stand_of(shortest, longest):
    return Stand("clocked", hours(shortest), hours(longest))


@pytest.mark.parametrize(
    ("shortest", "longest", "verdict"),
    [
        ("6:00", "6:00", "passes"),
        ("5:59", "5:59", "fails"),
        ("5:59", "6:00", "ask"),
        ("0:00", "5:59", "fails"),
        ("18:00", "18:00", "passes"),
        ("18:00", "18:01", "ask-long"),
        ("18:01", "18:01", "long"),
        ("18:01", "30:00", "long"),
        ("5:00", "19:00", "ask"),
    ],
)
def test_the_shortest_stand_must_be_enough_and_the_longest_not_too_much(shortest, longest, verdict):
    assert judge(stand_of(shortest, longest), SIX_HOURS, EIGHTEEN_HOURS) == verdict


@pytest.mark.parametrize(
    ("minutes", "verdict"), [(29, "fails"), (30, "passes"), (35, "passes"), (36, "long")]
)
def test_thirty_to_thirty_five_minutes_both_count(minutes, verdict):
    # Ontario community sampling: O. Reg. 170/03, schedule 15.1.
    stand = Stand("measured", timedelta(minutes=minutes), timedelta(minutes=minutes))
    assert judge(stand, timedelta(minutes=30), timedelta(minutes=35)) == verdict


def test_without_a_longest_no_stand_is_too_long():
    assert judge(stand_of("400:00", "400:00"), SIX_HOURS) == "passes"


# Text


def test_a_moment_keeps_its_milliseconds_and_its_form():
    assert format_utc(parse_utc("2031-05-04T06:30:00.000Z")) == "2031-05-04T06:30:00.000Z"
    east = datetime(2031, 5, 4, 8, 30, 0, 7999, tzinfo=timezone(timedelta(hours=2)))
    assert format_utc(east) == "2031-05-04T06:30:00.007Z"


@given(st.datetimes(timezones=st.just(UTC)))
def test_any_moment_comes_back_to_the_millisecond(at):
    cut = at.replace(microsecond=at.microsecond // 1000 * 1000)
    assert parse_utc(format_utc(at)) == cut


@pytest.mark.parametrize(
    "text",
    [
        "",
        "2031-05-04T06:30:00Z",
        "2031-05-04T06:30:00.000+00:00",
        "2031-05-04 06:30:00.000Z",
        "2031-02-30T06:30:00.000Z",
        "2031-05-04T24:30:00.000Z",
        "2031-05-04T06:30:00.000Z\n",
    ],
)
def test_a_moment_in_another_form_is_refused(text):
    with pytest.raises(BadTime):
        parse_utc(text)


def test_a_moment_without_a_zone_is_refused():
    with pytest.raises(BadTime) as caught:
        in_utc(datetime(2031, 5, 4))
    assert caught.value.values["why"] == "no-zone"


@pytest.mark.parametrize("local", ["", "22:30", "2026-03-07 22:00", "2026-02-30T10:00", "tonight"])
def test_a_local_time_in_another_form_is_refused(local):
    with pytest.raises(BadTime):
        to_utc(local, "America/Boise")


@pytest.mark.parametrize("zone", ["", "America", "Nowhere/Town", "../etc/passwd", "/etc/localtime"])
def test_a_zone_that_is_none_is_refused(zone):
    with pytest.raises(BadZone):
        to_utc("2026-03-07T22:00", zone)


@pytest.mark.parametrize(
    ("text", "length"),
    [
        ("PT6H", timedelta(hours=6)),
        ("P14D", timedelta(days=14)),
        ("PT30M", timedelta(minutes=30)),
        ("PT90S", timedelta(seconds=90)),
        ("P2W", timedelta(days=14)),
        ("P1DT12H30M5S", timedelta(days=1, hours=12, minutes=30, seconds=5)),
        ("PT0S", timedelta(0)),
    ],
)
def test_a_duration_is_as_long_as_it_says(text, length):
    assert parse_duration(text) == length


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("P6M", "calendar"),
        ("P1Y", "calendar"),
        ("P1Y2M3DT4H", "calendar"),
        ("P", "form"),
        ("PT", "form"),
        ("P1DT", "form"),
        ("6H", "form"),
        ("PT6", "form"),
        ("PT1.5H", "form"),
        ("-PT6H", "form"),
        ("pt6h", "form"),
        ("PT30M6H", "form"),
        ("P99999999999D", "form"),
        ("PT6H\n", "form"),
    ],
)
def test_a_duration_of_no_fixed_length_or_another_form_is_refused(text, reason):
    with pytest.raises(BadDuration) as caught:
        parse_duration(text)
    assert caught.value.values == {"value": text, "why": reason}


# The half hours offered for the last use


def test_half_hours_are_offered_from_now_back_with_yesterday_in_words():
    now = to_utc("2026-05-05T00:47", "America/Boise")
    offered = chips(now, "America/Boise", back=timedelta(hours=2))
    assert [(chip.local, chip.day) for chip in offered] == [
        ("2026-05-05T00:30", "today"),
        ("2026-05-05T00:00", "today"),
        ("2026-05-04T23:30", "yesterday"),
        ("2026-05-04T23:00", "yesterday"),
        ("2026-05-04T22:30", "yesterday"),
    ]


def test_half_hours_before_yesterday_bear_no_word():
    now = to_utc("2026-05-05T00:47", "America/Boise")
    assert chips(now, "America/Boise", back=timedelta(hours=30))[-1].day == "before"


def test_no_half_hour_is_offered_that_no_clock_showed():
    now = to_utc("2026-03-08T04:10", "America/Boise")
    offered = [chip.local[11:] for chip in chips(now, "America/Boise", back=timedelta(hours=2))]
    assert offered == ["04:00", "03:30", "03:00", "01:30", "01:00"]


def test_half_hours_that_clocks_showed_twice_are_offered_twice():
    now = to_utc("2026-11-01T02:00", "America/Boise")
    offered = chips(now, "America/Boise", back=timedelta(hours=2))
    assert [(chip.local[11:], chip.fold) for chip in offered] == [
        ("02:00", 0),
        ("01:30", 1),
        ("01:00", 1),
        ("01:30", 0),
        ("01:00", 0),
    ]


@pytest.mark.parametrize("zone", ["Asia/Kathmandu", "Australia/Lord_Howe", "America/Boise"])
def test_every_half_hour_offered_is_the_moment_that_its_face_means(zone):
    now = datetime(2026, 10, 4, 3, 17, 5, tzinfo=UTC)
    for chip in chips(now, zone, back=timedelta(days=1)):
        assert chip.local[14:] in ("00", "30")
        assert to_utc(chip.local, zone, chip.fold) == chip.at <= now


@given(
    st.datetimes(datetime(2020, 1, 1), datetime(2035, 1, 1), timezones=st.just(UTC)),
    st.sampled_from(["America/Boise", "Europe/Berlin", "Australia/Lord_Howe", "Asia/Kathmandu"]),
)
def test_any_face_a_clock_showed_leads_back_to_its_moment(at, zone):
    moment = at.replace(second=0, microsecond=0)
    local = moment.astimezone(zoneinfo.ZoneInfo(zone))
    assert to_utc(f"{local:%Y-%m-%dT%H:%M}", zone, local.fold) == moment
