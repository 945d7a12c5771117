"""Whatever is pressed, in whatever order: never stuck, nothing quietly accepted, one answer."""

import random
from copy import deepcopy
from datetime import timedelta

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fieldapp.domain import facts
from fieldapp.domain.protocols import read_protocol
from fieldapp.domain.protocols.standing import DUE_KINDS, STATES
from fieldapp.domain.timetext import parse_utc
from tests.domain.walking import PAIR, Kitchen

HOUR = timedelta(hours=1)
BLANK = ((6, "blank", "blank"),)
VISITS = {
    "first litre": ("first-litre", ((1, "compliance"), (2, "blank", "blank"))),
    "pair": ("first-and-fifth", PAIR + BLANK),
    "thirty minutes": ("thirty-minute", ((1, "compliance"), (2, "compliance"))),
}
# told only because something is missing, so they go when it arrives (R7)
OF_ABSENCE = {"not-asked", "stand-unknown", "wrong-order"}
STAND_KINDS = {
    "stand-short", "stand-doubtful", "stand-long", "stand-unknown", "tap-used-in-stand",
}  # fmt: skip

HALF_HOURS = st.integers(1, 60).map(lambda n: n * HOUR / 2)
DRAWS = st.integers(1, 6)
CODES = st.sampled_from(["BOTTLE-1", "BOTTLE-5", "OTHER"])
FILLS = st.sampled_from(["line", "below", "over", "spilled"])

ACTIONS = st.one_of(
    st.tuples(st.just("obey"), st.integers(0, 3), FILLS),
    st.tuples(st.just("obey"), st.just(0), st.just("line")),
    st.tuples(st.just("pass"), HALF_HOURS),
    st.tuples(st.just("use"), HALF_HOURS, st.integers(0, 6)),
    st.tuples(st.just("unknown")),
    st.tuples(st.just("shut")),
    st.tuples(st.just("waste"), st.booleans()),
    st.tuples(st.just("set"), DRAWS, CODES),
    st.tuples(st.just("fill"), DRAWS, CODES, FILLS),
    st.tuples(st.just("pour"), DRAWS, FILLS),
    st.tuples(st.just("tap"), st.booleans()),
    st.tuples(st.just("state"), st.sampled_from(["stand-short", "stand-long", "low-flow"])),
    st.tuples(st.just("leave")),
    st.tuples(st.just("restart")),
    st.tuples(st.just("close")),
)
TAKEN_BACK = st.tuples(st.just("withdraw"), st.integers(0, 40))
CLOCK_SET = st.tuples(st.just("clock"), st.integers(-120, 120))
OTHER_DEVICE = st.tuples(st.just("other"), st.sampled_from(["log-a", "log-b"]), st.integers(-4, 4))
# one tablet whose clock is set, or two whose clocks are some minutes apart
PATHS = st.lists(ACTIONS | TAKEN_BACK | CLOCK_SET, max_size=30) | st.lists(
    ACTIONS | TAKEN_BACK | OTHER_DEVICE, max_size=30
)


def act(kitchen: Kitchen, action: tuple) -> None:
    """Do one thing of a path, due or not."""
    kind, *given = action
    kitchen.wait(seconds=1)
    ACTS[kind](kitchen, *given)


def _obey(kitchen, choice, fill):
    due = kitchen.due
    if due.kind != "over":
        answer = due.answers[choice % len(due.answers)] if due.answers else ""
        kitchen.obey(answer, fill)


def _use(kitchen, ago, vague):
    kitchen.used(kitchen.at - ago, kitchen.at - ago + min(vague * HOUR / 2, ago))


def _set(kitchen, draw, code):
    kitchen.record(facts.BottleSet, bottle=code, draw=draw, kind_="", purpose="")


def _fill(kitchen, draw, code, fill):
    kitchen.record(facts.BottleFilled, bottle=code, draw=draw, fill=fill)


def _tap(kitchen, opens):
    kind = facts.TapOpened if opens else facts.TapClosed
    kitchen.record(kind, draws=(1, 2, 3, 4, 5))


def _withdraw(kitchen, place):
    if kitchen.entries:
        kitchen.withdraw(kitchen.entries[place % len(kitchen.entries)])


def _clock(kitchen, minutes):
    kitchen.at += timedelta(minutes=minutes)


def _other(kitchen, log, minutes):
    skew = timedelta(minutes=minutes)
    kitchen.at += skew - kitchen.skew
    kitchen.log, kitchen.boot, kitchen.skew = log, log, skew


ACTS = {
    "obey": _obey,
    "pass": lambda kitchen, length: kitchen.wait(seconds=length.total_seconds()),
    "use": _use,
    "unknown": lambda kitchen: kitchen.record(
        facts.WaterUsed, from_="", to="", exact="unknown", where=""
    ),
    "waste": lambda kitchen, opens: kitchen.record(
        facts.RunStarted if opens else facts.RunEnded, step="run"
    ),
    "shut": lambda kitchen: kitchen.record(facts.StandStarted),
    "set": _set,
    "fill": _fill,
    "pour": lambda kitchen, draw, fill: kitchen.record(facts.DrawPoured, draw=draw, fill=fill),
    "tap": _tap,
    "state": lambda kitchen, kind: kitchen.record(
        facts.DeviationStated, step="stand", deviation=kind
    ),
    "leave": lambda kitchen: kitchen.record(facts.VisitLeft, why="waiting"),
    "restart": lambda kitchen: kitchen.restart(),
    "close": lambda kitchen: kitchen.record(facts.VisitClosed, outcome="done"),
    "withdraw": _withdraw,
    "clock": _clock,
    "other": _other,
}


def begin(visit: str) -> Kitchen:
    name, draws = VISITS[visit]
    return Kitchen(name, draws)


@pytest.mark.parametrize("visit", VISITS)
@settings(max_examples=150, deadline=None)
@given(path=PATHS)
def test_no_path_gets_stuck(visit, path):
    kitchen = begin(visit)
    for action in path:
        act(kitchen, action)
        standing = kitchen.where()
        assert standing.due.kind in DUE_KINDS
        assert standing.state in STATES
        assert 1 <= standing.number <= standing.of

    deepcopy(kitchen).walk()  # fails when what is due, once done, leads nowhere


@pytest.mark.parametrize("visit", VISITS)
@settings(max_examples=100, deadline=None)
@given(path=PATHS, seed=st.integers(0, 1_000))
def test_the_same_facts_in_any_order_give_the_same_answer(visit, path, seed):
    kitchen = begin(visit)
    for action in path:
        act(kitchen, action)
    before = kitchen.where()

    random.Random(seed).shuffle(kitchen.entries)
    kitchen.entries.extend(kitchen.entries[:3])  # and some of them twice

    assert kitchen.where() == before


@pytest.mark.parametrize("visit", VISITS)
@settings(max_examples=150, deadline=None)
@given(path=st.lists(ACTIONS, max_size=30))
def test_no_press_makes_a_deviation_disappear(visit, path):
    kitchen = begin(visit)
    for action in path:
        before = set(kitchen.kinds())
        closed = kitchen.where().state == "closed"
        act(kitchen, action)
        assert before - (OF_ABSENCE if closed else set()) <= set(kitchen.kinds())


USES = facts.WaterUsed | facts.StandStarted | facts.RunStarted | facts.RunEnded


def _least(kitchen: Kitchen) -> timedelta:
    return HOUR / 2 if kitchen.name == "thirty-minute" else 6 * HOUR


def _ran_five(kitchen: Kitchen, before) -> bool:
    """Say whether the tap ran five minutes to waste before that entry, from opening to closing."""
    since = None
    for entry in kitchen.entries[: kitchen.entries.index(before)]:
        if isinstance(entry.fact, facts.RunStarted):
            since = entry.at
        if isinstance(entry.fact, facts.RunEnded) and since:
            if entry.at - since >= HOUR / 12:
                return True
            since = None
    return False


def forbidden(kitchen: Kitchen) -> set[str]:
    """Return what the document forbids and the facts show, told without the engine."""
    own = {one.draw for one in kitchen.protocol.draws()}
    known, unknown, first, filled, found = [], [], None, set(), set()
    for entry in kitchen.entries:
        fact = entry.fact
        draws = {getattr(fact, "draw", 0), *getattr(fact, "draws", ())} & own
        if isinstance(fact, facts.WaterUsed) and not fact.to:
            unknown.append(entry.at)  # it may have run until then
        elif isinstance(fact, USES):
            known.append(parse_utc(fact.to) if hasattr(fact, "to") else entry.at)
            unknown.clear()  # who knows has answered who did not
        if isinstance(fact, facts.QuestionAnswered) and fact.answer in ("filter", "hot"):
            found.add(fact.answer)
        if not draws or isinstance(fact, facts.BottleSet | facts.TapClosed):
            continue
        uses = known + unknown
        if first is None and uses and entry.at - max(uses) < _least(kitchen):
            found.add("stand")
        if first is None and _least(kitchen) < HOUR and not _ran_five(kitchen, entry):
            found.add("run")
        first = first or entry
        if not isinstance(fact, facts.TapOpened):
            found |= _of_filling(kitchen, fact, filled)
            filled |= draws
    return found


def _of_filling(kitchen: Kitchen, fact, filled: set[int]) -> set[str]:
    found = set()
    if fact.draw in filled:
        return {"twice"}
    if any(later > fact.draw for later in filled):
        found.add("order")
    if fact.fill != "line" and _matters(kitchen, fact.draw):
        found.add("fill")
    return found


def _matters(kitchen: Kitchen, draw: int) -> bool:
    """Say whether a kept litre is that one, or runs on behind it."""
    return any(one.keep and one.draw >= draw for one in kitchen.protocol.draws())


SHOWN = {
    "stand": STAND_KINDS,
    "order": {"wrong-order"},
    "run": {"run-short"},
    "twice": {"filled-twice"},
    "fill": {"fill-below", "fill-over", "fill-spilled", "litres-shifted"},
    "filter": {"filter-in-place"},
    "hot": {"hot-water"},
}


@pytest.mark.parametrize("visit", VISITS)
@settings(max_examples=200, deadline=None)
@given(path=st.lists(ACTIONS, max_size=30))
def test_nothing_that_the_document_forbids_is_accepted_without_a_deviation(visit, path):
    kitchen = begin(visit)
    for action in path:
        act(kitchen, action)

    kinds = set(kitchen.kinds())
    assert [one for one in forbidden(kitchen) if not SHOWN[one] & kinds] == []


@pytest.mark.parametrize("visit", VISITS)
@settings(max_examples=60, deadline=None)
@given(
    lengths=st.lists(st.integers(1, 400).map(lambda n: timedelta(minutes=n)), max_size=20),
    start=HALF_HOURS,
)
def test_who_does_only_what_is_due_never_deviates_but_by_a_long_stand(visit, lengths, start):
    kitchen = begin(visit)
    kitchen.last_use = start
    lengths = iter(lengths)
    while kitchen.due.kind != "over":
        kitchen.obey()
        kitchen.wait(seconds=next(lengths, HOUR / 60).total_seconds())
        assert len(kitchen.entries) < 60

    assert set(kitchen.kinds()) <= {"stand-long"}


CANADIAN = """\
id = "thirty-minutes"
title = "Thirty minutes"
source = "an invented authority, order 9"
in_force = { from = 2026-01-01 }
analytes = ["lead"]
[[step]]
run = { minimum = "PT5M", flow = "full" }
[[step]]
breach = "bar"
stand = { minimum = "PT30M", maximum = "PT35M" }
[[step]]
fill = { draw = 1, volume_ml = 1000, kind = "standing", analyse = ["lead"] }
[[step]]
fill = { draw = 2, volume_ml = 1000, running_on = true, analyse = ["lead"] }
"""


def thirty() -> Kitchen:
    draws = ((1, "compliance"), (2, "compliance"))
    return Kitchen("thirty-minutes", draws, document=read_protocol(CANADIAN))


def test_a_run_and_a_stand_inside_the_visit_are_walked():
    kitchen = thirty()

    assert kitchen.walk() == ["open", "run", "run", "wait", "set", "set", "tap", "fill", "close"]
    assert kitchen.deviations() == []
    assert kitchen.where().stand.basis == "measured"


def test_a_stand_inside_the_visit_is_counted_from_the_end_of_the_run():
    kitchen = thirty().until("wait")
    assert kitchen.due.until == kitchen.at + timedelta(minutes=30)

    kitchen.wait(minutes=29)
    assert (kitchen.due.kind, kitchen.where().bars[0].breach) == ("wait", "bar")
    kitchen.wait(minutes=1)
    assert kitchen.due.kind == "set"
    kitchen.wait(minutes=6)
    assert kitchen.due.question == "stand-long"


def test_a_run_ended_too_early_is_due_again_and_short_when_drawn_all_the_same():
    kitchen = thirty().until("run")
    kitchen.obey()
    kitchen.wait(minutes=4)
    (bar,) = kitchen.where().bars
    assert (bar.rule, bar.deviation) == ("run-too-short", "run-short")
    kitchen.record(facts.RunEnded, step="run")
    assert (kitchen.due.kind, kitchen.due.since) == ("run", None)

    kitchen.wait(minutes=30)
    kitchen.record(facts.TapOpened, draws=(1, 2))

    assert kitchen.kinds() == ["run-short"]
    assert kitchen.due.kind == "set"


def test_a_stand_without_a_run_waits_for_the_press_that_the_tap_is_shut():
    step = '[[step]]\nrun = { minimum = "PT5M", flow = "full" }\n'
    document = read_protocol(CANADIAN.replace(step, ""))
    kitchen = Kitchen("thirty-minutes", ((1, "a"), (2, "a")), document=document).until("wait")

    assert (kitchen.due.since, kitchen.due.until) == (None, None)
    assert kitchen.walk() == ["wait", "wait", "set", "set", "tap", "fill", "close"]
