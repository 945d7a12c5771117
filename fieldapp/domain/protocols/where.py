"""The step engine: from a protocol and what is recorded to the act that is due.

Pure: it reads no clock and keeps no state, so a crash, a reload or another device gives the same
answer. What has happened is never refused (R1); it comes back as a deviation.
"""

from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime, timedelta

from fieldapp.domain.facts import DrawPoured, VisitPlanned
from fieldapp.domain.protocols.found import deviations
from fieldapp.domain.protocols.model import Protocol
from fieldapp.domain.protocols.standing import Bar, DrawStanding, Due, Standing
from fieldapp.domain.protocols.stations import Filling, Question, Signature, Station, Waste
from fieldapp.domain.protocols.steps import LAST_USE, Fill, StandRule
from fieldapp.domain.protocols.stood import DOUBT, FAILS, LONG, NOTHING, Stood
from fieldapp.domain.protocols.visit import (
    ANOTHER_DAY,
    DRAW_NOW,
    STAND_DOUBT,
    STAND_LONG,
    WAIT,
    Visit,
    flushed,
    over,
    running,
    visit_of,
)
from fieldapp.domain.recorded import Reading, Recorded

Turn = tuple[Due, tuple[Bar, ...]]
CLOSE: Turn = (Due(kind="close"), ())


def where(
    protocol: Protocol,
    plan: VisitPlanned,
    recorded: Sequence[Recorded],
    now: Reading,
    *,
    keep_poured: bool = False,
    offset_bound: timedelta = NOTHING,
    preset: Mapping[str, str] | None = None,
) -> Standing:
    """Return where the visit stands: what is due, what bars it, what deviated.

    ``recorded`` are the living facts of the visit in any order; ``preset`` the questions that the
    round answered for all its visits; ``offset_bound`` the most by which this device's clock may
    be out against another's.
    """
    visit = visit_of(
        protocol,
        plan,
        recorded,
        now,
        keep_poured=keep_poured,
        offset_bound=offset_bound,
        preset=preset or {},
    )
    stopped = _stopped(visit)
    number, due, bars = _turn(visit, stopped)
    rule, told = _stand(visit)
    return Standing(
        state=_state(visit),
        due=due,
        number=number,
        of=len(visit.stations) + 1,
        bars=bars,
        draws=tuple(_draws(visit)),
        deviations=deviations(visit),
        stand=told.stand if told else None,
        stand_verdict=told.verdict(rule) if told and rule else "",
        earliest_draw=_earliest_draw(visit, rule, told),
        stopped=stopped,
        answers={question: one.answer for question, one in visit.answers.items()},
        beyond=protocol.beyond(),
    )


def _state(visit: Visit) -> str:
    if visit.seen.closed:
        return "closed"
    if visit.seen.left:
        return "left"
    return "open" if visit.seen.begun else "planned"


def _stopped(visit: Visit) -> str:
    """Return the outcome with which an answer in force ends the visit, empty for none."""
    for question in (*visit.asks, STAND_LONG):
        answer = visit.answers.get(question)
        if answer and visit.outcome(answer):
            return visit.outcome(answer)
    return ""


def _turn(visit: Visit, stopped: str) -> tuple[int, Due, tuple[Bar, ...]]:
    """Return the number of the station whose turn it is, the act due and what bars it."""
    last = len(visit.stations) + 1
    if visit.seen.closed:
        return last, Due(kind="over"), ()
    number, (due, bars) = (last, CLOSE) if stopped else _first_turn(visit)
    if _state(visit) in ("planned", "left"):
        return number, Due(kind="open"), ()
    return number, due, bars


def _first_turn(visit: Visit) -> tuple[int, Turn]:
    for number, station in enumerate(visit.stations, start=1):
        turn = _turn_at(visit, station)
        if turn:
            return number, turn
    return len(visit.stations) + 1, CLOSE


def _turn_at(visit: Visit, station: Station) -> Turn | None:
    """Return what is due at a station, None when it is over."""
    if isinstance(station, Question):
        return _question(visit, station)
    if isinstance(station, Waste):
        return _waste(visit, station)
    if isinstance(station, Filling):
        return _filling(visit, station)
    return _signature(visit, station)


def _question(visit: Visit, station: Question) -> Turn | None:
    ask = station.step
    if ask.question == LAST_USE:
        if visit.last_use_told():
            return None
        return Due(kind=LAST_USE, step=ask.id, question=LAST_USE, says=ask.says, why=ask.why,
                   source=ask.source), ()  # fmt: skip
    if ask.question in visit.answers:
        return None
    due = Due(
        kind="ask",
        step=ask.id,
        question=ask.question,
        answers=ask.answers,
        says=ask.says,
        words=dict(ask.words),
        why=ask.why,
        source=ask.source,
    )
    return due, ()


def _signature(visit: Visit, station: Signature) -> Turn | None:
    sign = station.step
    if sign.who in visit.seen.signed:
        return None
    return Due(kind="sign", step=sign.id, who=sign.who, why=sign.why, source=sign.source), ()


def _waste(visit: Visit, station: Waste) -> Turn | None:
    """Return the turn of water to waste: the opening, then the closing, barred while too early."""
    if over(visit, station):
        return None
    step = station.step
    started = visit.running_since(step)
    until = visit.now.at + (step.minimum - visit.ran(started)) if started else None
    due = Due(
        kind="run",
        step=step.id,
        minimum=step.minimum,
        since=started.at if started else None,
        until=until,
        why=step.why,
        source=step.source,
    )
    if started is None or until is None or visit.now.at >= until:
        return due, ()
    if visit.excused(("run-short",), (step.id,), -1):
        return due, ()  # it was said that it ran short; the tap is still open
    values = {"minimum": step.minimum, "ran": visit.ran(started)}
    return due, (Bar("run-too-short", step.breach, "run-short", values, until),)


def _filling(visit: Visit, filling: Filling) -> Turn | None:
    """Return the turn of one fill or run of fills: the stand, the bottles, the tap, the filling."""
    left = [fill for fill in filling.fills if fill.draw not in visit.seen.fills]
    if not left:
        return None
    if filling.rule and visit.seen.began(filling.draws) is None:
        turn = _standing_still(visit, filling, filling.rule)
        if turn:
            return turn
    draws = tuple(fill.draw for fill in left)
    unset = [fill for fill in left if fill.keep and fill.draw not in visit.seen.sets]
    if unset:
        return _due_fill("set", unset[0], draws, unset[0].draw), ()
    if len(filling.fills) > 1 and not visit.seen.opened(filling.draws):
        return _due_fill("tap", left[0], draws), ()
    return _due_fill("blank" if filling.blank else "fill", left[0], draws), ()


def _due_fill(kind: str, fill: Fill, draws: tuple[int, ...], next_draw: int = 0) -> Due:
    return Due(
        kind=kind,
        step=fill.id,
        draws=draws,
        next_draw=next_draw,
        why=fill.why,
        source=fill.source,
    )


def _standing_still(visit: Visit, filling: Filling, rule: StandRule) -> Turn | None:
    """Return the wait or the question that the stand asks for, None when the draw may begin."""
    told = visit.stood(filling)
    if told is None:  # nobody pressed yet that the last tap is shut
        return _wait(filling, rule), ()
    verdict = told.verdict(rule)
    steps = (filling.wait, LAST_USE, *(fill.id for fill in filling.fills))
    if verdict == LONG:
        return _ask_long(visit, told, rule, filling, steps)
    if verdict not in (FAILS, DOUBT) or rule.breach == "note":
        return None
    if visit.excused(("stand-short", "stand-doubtful", "stand-unknown"), steps, told.position):
        return None
    until = told.enough_at(rule)
    if verdict == FAILS:
        bar = Bar("stand-too-short", rule.breach, "stand-short", told.values(rule), until)
        return _wait(filling, rule, told), (bar,)
    answer = visit.answered_since(STAND_DOUBT, told.position)
    if answer == DRAW_NOW:
        return None
    bar = Bar("stand-in-doubt", "ask", told.deviation(rule), told.values(rule), until)
    if answer == WAIT:
        return _wait(filling, rule, told), (bar,)
    return _ask(filling, rule, STAND_DOUBT, (WAIT, DRAW_NOW)), (bar,)


def _ask_long(
    visit: Visit, told: Stood, rule: StandRule, filling: Filling, steps: Sequence[str]
) -> Turn | None:
    answered = visit.answered_since(STAND_LONG, told.position)
    excused = visit.excused(("stand-long",), steps, told.position)
    if answered == DRAW_NOW or excused or rule.breach == "note":
        return None
    bar = Bar("stand-too-long", "ask", "stand-long", told.values(rule))
    return _ask(filling, rule, STAND_LONG, (DRAW_NOW, ANOTHER_DAY)), (bar,)


def _ask(filling: Filling, rule: StandRule, question: str, answers: tuple[str, ...]) -> Due:
    return Due(
        kind="ask",
        step=filling.wait,
        question=question,
        answers=answers,
        draws=filling.draws,
        why=rule.why,
        source=rule.question_source if question == STAND_LONG else rule.source,
    )


def _wait(filling: Filling, rule: StandRule, told: Stood | None = None) -> Due:
    return Due(
        kind="wait",
        step=filling.wait,
        draws=filling.draws,
        minimum=rule.minimum,
        since=told.since if told else None,
        until=told.enough_at(rule) if told else None,
        here=filling.here,
        why=rule.why,
        source=rule.source,
    )


def _stand(visit: Visit) -> tuple[StandRule | None, Stood | None]:
    """Return the stand that pages show: before the first draw that asks for one.

    A visit closed without that draw has none: nothing ended it. Nor has one in which water must
    run to waste first: until then nothing has begun to stand.
    """
    for filling in visit.fillings:
        if filling.rule:
            drawn = visit.seen.began(filling.draws)
            stands = not visit.seen.closed and flushed(visit, filling)
            return filling.rule, visit.stood(filling) if drawn or stands else None
    return None, None


def _earliest_draw(visit: Visit, rule: StandRule | None, told: Stood | None) -> datetime | None:
    """Return when the stand is long enough for sure, None once the draw has begun."""
    if rule is None or told is None:
        return None
    begun = any(visit.seen.began(one.draws) for one in visit.fillings if one.rule == rule)
    return None if begun else told.enough_at(rule)


def _draws(visit: Visit) -> Iterable[DrawStanding]:
    """Tell each draw of the bottle rail."""
    for fill in (fill for filling in visit.fillings for fill in filling.fills):
        filled = visit.seen.filled(fill.draw)
        sets = visit.seen.sets.get(fill.draw)
        state = "set" if sets else "waiting"
        if filled:
            state = "poured" if isinstance(filled.fact, DrawPoured) else "filled"
        elif running(visit, fill.draw):
            state = "running"
        bottle = sets[-1].fact.bottle if sets else ""
        yield DrawStanding(
            draw=fill.draw,
            kind=fill.kind,
            purpose=visit.purposes.get(fill.draw, ""),
            volume_ml=fill.volume_ml,
            analyse=fill.analyse,
            keep=fill.keep,
            state=state,
            bottle=getattr(filled.fact, "bottle", "") if filled else bottle,
            fill=filled.fact.fill if filled else "",
            filled_at=filled.at if filled else None,
        )
