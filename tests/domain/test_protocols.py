"""Protocol documents: what ships, what is read, and every fault named at once."""

import hashlib
from datetime import date, timedelta
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldapp.domain.deviations import DEVIATIONS, bias_of, stated_kinds
from fieldapp.domain.errors import Unknown
from fieldapp.domain.protocols import BadProtocol, Fault, Protocol, find, read_protocol, shipped
from fieldapp.domain.protocols import model as model_module
from fieldapp.domain.protocols.steps import Ask, Fill, Look, Measure, Photograph, Run, StandWait
from tests.domain.walking import Kitchen

SMALL = """\
id = "small"
title = "Small"
source = "an invented authority, order 7"
in_force = { from = 2026-01-01 }
analytes = ["lead"]

[[step]]
fill = { draw = 1, volume_ml = 250, kind = "random-daytime", analyse = ["lead"] }
"""


def faults(text: str) -> tuple[Fault, ...]:
    """Return what is wrong with a document."""
    with pytest.raises(BadProtocol) as caught:
        read_protocol(text)
    return caught.value.faults


def read_or_refused(text: str) -> Protocol | tuple[Fault, ...]:
    """Return the protocol, or the faults for which it is refused; anything else is raised."""
    try:
        return read_protocol(text)
    except BadProtocol as bad:
        return bad.faults


SHIPPED = ["first-and-fifth", "first-litre", "thirty-minute"]


def test_three_protocols_ship():
    assert list(shipped()) == SHIPPED


def test_an_unknown_protocol_is_named():
    with pytest.raises(Unknown) as caught:
        find("third-litre")

    assert caught.value.values == {"what": "protocol", "name": "third-litre"}


@pytest.mark.parametrize("name", SHIPPED)
def test_a_shipped_protocol_is_known_by_the_digest_of_its_own_bytes(name):
    file = Path(model_module.__file__).with_name(f"{name}.toml")

    assert find(name).sha256 == hashlib.sha256(file.read_bytes()).hexdigest()
    assert read_protocol(find(name).toml) == find(name)


@pytest.mark.parametrize("name", SHIPPED)
def test_each_value_of_a_shipped_protocol_stands_beside_its_source(name):
    protocol = find(name)

    assert protocol.source
    assert protocol.acidify_source
    assert protocol.tap.source
    if protocol.stand:
        assert protocol.stand.source
        assert protocol.stand.question_source
    asked = [step for step in protocol.steps if not (isinstance(step, Fill) and not step.keep)]
    assert [step.id for step in asked if not step.source or not step.why] == []


@pytest.mark.parametrize("name", SHIPPED)
def test_each_step_says_why_in_two_sentences(name):
    protocol = find(name)
    whys = [step.why for step in protocol.steps if step.why]
    whys += [protocol.stand.why] if protocol.stand else []

    assert [why for why in whys if why.count(". ") != 1 or not why.endswith(".")] == []


@pytest.mark.parametrize("name", SHIPPED)
def test_each_question_has_its_words_and_a_word_for_each_answer(name):
    asks = [step for step in find(name).steps if isinstance(step, Ask)]

    assert all(ask.says.endswith("?") for ask in asks)
    assert all(set(ask.words) == set(ask.answers) for ask in asks)


def test_the_first_litre_binds_until_the_last_day_of_october_2027():
    protocol = find("first-litre")

    assert not protocol.in_force_on(date(2024, 10, 29))
    assert protocol.in_force_on(date(2024, 10, 30))
    assert protocol.in_force_on(date(2027, 10, 31))
    assert not protocol.in_force_on(date(2027, 11, 1))


def test_the_pair_binds_from_november_2027():
    protocol = find("first-and-fifth")

    assert not protocol.in_force_on(date(2027, 10, 31))
    assert protocol.in_force_on(date(2027, 11, 1))
    assert protocol.in_force_to is None


def test_the_thirty_minute_stand_is_canadas_and_has_no_last_day():
    protocol = find("thirty-minute")

    assert protocol.jurisdiction == "Canada"
    assert protocol.in_force_on(date(2027, 5, 4))
    assert protocol.in_force_to is None


def test_the_thirty_minute_stand_runs_five_minutes_stands_thirty_and_fills_two_litres_in_one_run():
    protocol = find("thirty-minute")

    assert protocol.stand is None
    (run,) = [step for step in protocol.steps if isinstance(step, Run)]
    (stand,) = [step for step in protocol.steps if isinstance(step, StandWait)]
    assert (run.minimum, run.breach) == (timedelta(minutes=5), "bar")
    assert (stand.minimum, stand.breach) == (timedelta(minutes=30), "bar")
    assert [(one.volume_ml, one.kind, one.running_on) for one in protocol.labelled()] == [
        (1000, "standing", False),
        (1000, "standing", True),
    ]


def test_a_first_litre_is_one_wide_litre_for_lead_and_copper():
    (draw,) = find("first-litre").draws()

    assert (draw.draw, draw.volume_ml, draw.mouth_min_mm) == (1, 1000, 55)
    assert (draw.kind, draw.analyse, draw.keep) == ("first-draw", ("lead", "copper"), True)


def test_of_a_pair_the_first_and_the_fifth_carry_labels():
    protocol = find("first-and-fifth")

    assert [one.draw for one in protocol.draws()] == [1, 2, 3, 4, 5]
    assert [(one.draw, one.analyse) for one in protocol.labelled()] == [
        (1, ("lead", "copper")),
        (5, ("lead",)),
    ]
    assert [one.running_on for one in protocol.draws()] == [False, True, True, True, True]
    assert len(protocol.labelled(keep_poured=True)) == 5


@pytest.mark.parametrize("name", ["first-and-fifth", "first-litre"])
def test_the_stand_is_six_hours_and_asked_about_above_eighteen(name):
    stand = find(name).stand

    assert (stand.minimum, stand.question_above) == (timedelta(hours=6), timedelta(hours=18))
    assert (stand.quiet, stand.flush_before, stand.breach) == ("building", "forbidden", "ask")
    assert find(name).acidify_within == timedelta(days=14)


def test_every_kind_of_step_is_read():
    protocol = read_protocol(
        SMALL
        + """
[[step]]
look = { at = "flow", expect = "steady" }
[[step]]
run = { minimum = "PT5M", flow = "full" }
[[step]]
breach = "bar"
stand = { minimum = "PT30M", maximum = "PT35M" }
[[step]]
fill = { draw = 2, volume_ml = 1000, kind = "standing", analyse = ["lead"] }
[[step]]
measure = { quantity = "ph", unit = "[pH]", within = "PT15M" }
[[step]]
photograph = { of = "tap", wanted = false }
[[step]]
sign = { who = "resident" }
"""
    )

    kinds = [type(step) for step in protocol.steps]
    assert kinds[1:4] == [Look, Run, StandWait]
    assert kinds[5:7] == [Measure, Photograph]
    assert [step.id for step in protocol.steps] == [
        "draw-1", "flow", "run", "stand-here", "draw-2", "measure-ph", "photo-tap", "sign-resident",
    ]  # fmt: skip
    assert protocol.steps[3].maximum == timedelta(minutes=35)


def test_steps_that_this_program_cannot_walk_yet_are_named():
    protocol = read_protocol(SMALL + '[[step]]\nmeasure = { quantity = "ph", unit = "[pH]" }\n')

    assert protocol.beyond() == ("measure-ph",)
    kitchen = Kitchen("small", document=protocol)
    assert kitchen.walk() == ["open", "set", "fill", "close"]
    assert kitchen.where().beyond == ("measure-ph",)


def test_a_stand_without_a_question_for_the_last_use_gets_one_before_the_first_fill():
    protocol = read_protocol(SMALL + '[stand]\nminimum = "PT6H"\nsource = "order 7"\n')

    assert [step.id for step in protocol.steps] == ["last-use", "draw-1"]
    assert Kitchen("small", document=protocol).walk() == [
        "open", "last-use", "set", "fill", "close",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("old", "new", "path", "rule"),
    [
        ('id = "small"', 'id = "Small!"', "id", "out-of-range"),
        ('id = "small"\n', "", "id", "missing"),
        ('title = "Small"', "title = 7", "title", "wrong-type"),
        ('title = "Small"', 'title = " "', "title", "missing"),
        ("in_force = { from = 2026-01-01 }\n", "", "in_force", "missing"),
        ("from = 2026-01-01", 'from = "soon"', "in_force.from", "wrong-type"),
        ("from = 2026-01-01", "from = 2026-01-01T06:00:00", "in_force.from", "wrong-type"),
        (
            "from = 2026-01-01",
            "from = 2026-01-01, to = 2025-01-01",
            "in_force.to",
            "out-of-range",
        ),
        ("from = 2026-01-01", "since = 2026-01-01", "in_force.since", "unknown-key"),
        ('["lead"]\n\n', '["lead", "lead"]\n\n', "analytes", "twice"),
        ('["lead"]\n\n', "[]\n\n", "analytes", "out-of-range"),
        ("[[step]]", "[[steps]]", "step", "missing"),
        ("draw = 1", "draw = 0", "step 1, fill.draw", "out-of-range"),
        ("draw = 1", "draw = true", "step 1, fill.draw", "wrong-type"),
        ("draw = 1, ", "", "step 1, fill.draw", "missing"),
        ("volume_ml = 250", "volume_ml = 250.0", "step 1, fill.volume_ml", "wrong-type"),
        ("volume_ml", "volume_l", "step 1, fill.volume_l", "unknown-key"),
        ("random-daytime", "lucky", "step 1, fill.kind", "not-one-of"),
        ('analyse = ["lead"]', 'analyse = ["gold"]', "step 1, fill.analyse", "not-declared"),
        (
            'analyse = ["lead"]',
            'analyse = ["lead"], after = "pour away"',
            "step 1, fill.analyse",
            "not-declared",
        ),
        ("draw = 1", "draw = 1, running_on = true", "step 1, fill.running_on", "order"),
        ("fill = {", "spill = {", "step 1, spill", "unknown-key"),
        ("fill = {", "fill = 1 #", "step 1, fill", "wrong-type"),
        ("fill = {", 'id = "blank"\nfill = {', "step 1, id", "twice"),
        ("fill = {", 'breach = "shout"\nfill = {', "step 1, breach", "not-one-of"),
        ("fill = {", 'sign = { who = "sampler" }\nfill = {', "step 1", "twice"),
    ],
)
def test_a_fault_is_named_by_its_key_and_its_rule(old, new, path, rule):
    assert old in SMALL

    assert (path, rule) in [(one.path, one.rule) for one in faults(SMALL.replace(old, new, 1))]


@pytest.mark.parametrize(
    ("more", "path", "rule"),
    [
        ('[stand]\nminimum = "6 h"', "stand.minimum", "bad-duration"),
        ('[stand]\nminimum = "PT0S"', "stand.minimum", "bad-duration"),
        ('[stand]\nminimum = "P1M"', "stand.minimum", "bad-duration"),
        ('[stand]\nquiet = "street"\nminimum = "PT6H"', "stand.quiet", "not-one-of"),
        (
            '[stand]\nminimum = "PT6H"\nquestion_above = "PT5H"',
            "stand.question_above",
            "out-of-range",
        ),
        ('[tap]\naerator = "polish"', "tap.aerator", "not-one-of"),
        ('[[step]]\nask = { question = "q" }', "step 2, ask.answers", "missing"),
        ('[[step]]\nask = { question = "q", answers = [] }', "step 2, ask.answers", "out-of-range"),
        (
            '[[step]]\nask = { question = "q", answers = ["a"], stops_if = { b = "unfit" } }',
            "step 2, ask.stops_if.b",
            "unknown-key",
        ),
        (
            '[[step]]\nask = { question = "q", answers = ["a"], deviates = { a = "ghost" } }',
            "step 2, ask.deviates.a",
            "not-declared",
        ),
        (
            '[[step]]\nask = { question = "stand-doubt", answers = ["a"] }',
            "step 2, ask.question",
            "twice",
        ),
        ('[[step]]\nask = { question = "last-use" }', "step 2, ask.question", "order"),
        (
            '[[step]]\nlook = { at = "q", expect = "b" }\n'
            '[[step]]\nask = { question = "q", answers = ["a"] }',
            "step 3, ask.question",
            "twice",
        ),
        ('[[step]]\nfill = { draw = 1, volume_ml = 1 }', "step 2, fill.draw", "order"),
        ('[[step]]\nfill = { draw = 1, volume_ml = 1 }', "step 2, id", "twice"),
        ('[[step]]\nstand = { minimum = "PT30M" }', "step", "order"),
        (
            '[[step]]\nstand = { minimum = "PT30M", maximum = "PT30M" }',
            "step 2, stand.maximum",
            "out-of-range",
        ),
        ('[[step]]\nsign = { who = "cat" }', "step 2, sign.who", "not-one-of"),
        ('[[step]]\nrun = {}', "step 2, run.minimum", "missing"),
    ],
)  # fmt: skip
def test_a_fault_of_what_may_be_added_is_named(more, path, rule):
    assert (path, rule) in [(one.path, one.rule) for one in faults(f"{SMALL}{more}\n")]


def test_a_run_to_waste_before_the_first_fill_would_break_its_stand():
    step, rest = SMALL.split("[[step]]")
    run = '[stand]\nminimum = "PT6H"\n[[step]]\nrun = { minimum = "PT5M" }\n'

    assert [(one.path, one.rule) for one in faults(f"{step}{run}[[step]]{rest}")] == [
        ("step 1, run", "order")
    ]


def test_all_faults_are_named_at_once_each_with_its_line():
    text = SMALL.replace("250", "0").replace('"Small"', "3").replace("lead", "Lead", 1)

    assert [(one.path, one.line, one.value, one.rule) for one in faults(text)] == [
        ("analytes", 5, "['Lead']", "out-of-range"),
        ("title", 2, "3", "wrong-type"),
        ("step 1, fill.volume_ml", 8, "0", "out-of-range"),
        ("step 1, fill.analyse", 8, "['lead']", "not-declared"),
    ]


def test_a_fault_says_what_would_be_right():
    (fault,) = faults(SMALL.replace("250", "250000"))

    assert fault.right == "a whole number from 1 to 20000"


def test_what_is_no_toml_is_named_by_its_line():
    (fault,) = faults(SMALL.replace('title = "Small"', "title = Small"))

    assert (fault.line, fault.rule) == (2, "not-toml")


def test_a_text_too_long_for_one_entry_is_refused():
    assert faults(SMALL + "# " + "x" * 24 * 1024)[0].rule == "too-large"


@given(st.text(max_size=200))
def test_no_text_does_anything_but_be_read_or_refused(text):
    assert read_or_refused(text)


JUNK = st.sampled_from(
    ['""', "7", "-1", "true", "1.5", "[]", "{}", '"PT6H"', "2026-01-01", "[[1]]"]
)


@given(st.data())
def test_a_shipped_document_with_one_value_changed_is_read_or_refused(data):
    lines = find("first-and-fifth").toml.split("\n")
    keys = [n for n, line in enumerate(lines) if " = " in line and not line.startswith("#")]
    number = data.draw(st.sampled_from(keys))
    lines[number] = f"{lines[number].split(' = ')[0]} = {data.draw(JUNK)}"

    assert read_or_refused("\n".join(lines))


def test_every_kind_of_deviation_has_a_direction_and_a_source():
    assert {one.bias for one in DEVIATIONS.values()} == {"low", "high", "either"}
    assert [one.kind for one in DEVIATIONS.values() if not one.source] == []
    assert all(kind == one.kind for kind, one in DEVIATIONS.items())


def test_the_directions_are_those_of_the_trade():
    assert [bias_of(kind) for kind in ("aerator-cleaned", "aerator-removed")] == ["low", "either"]
    assert [bias_of(kind) for kind in ("stand-short", "stand-long")] == ["low", "high"]
    assert [bias_of(kind) for kind in ("hot-water", "plumbing-work", "pre-flush")] == [
        "high", "high", "low",
    ]  # fmt: skip


def test_a_person_may_state_what_only_a_person_can_see():
    assert {"pre-flush", "low-flow", "interrupted-flow", "narrow-mouth", "other"} <= set(
        stated_kinds()
    )
    assert "drawn-after-stop" not in stated_kinds()
