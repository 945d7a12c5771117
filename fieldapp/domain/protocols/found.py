"""The deviations that have occurred in a visit: those the program finds and those people state.

Each stays as long as its evidence stands. Only what rests on an absence (``not-asked``, a missing
last use, a missing litre of a run) is told when the visit is closed, and goes when it arrives (R7).
"""

from bisect import bisect_left
from collections.abc import Iterable
from dataclasses import replace

from fieldapp.domain.protocols.litres import make, of_draws
from fieldapp.domain.protocols.seen import Answer, Noted
from fieldapp.domain.protocols.standing import Deviation
from fieldapp.domain.protocols.stations import Waste
from fieldapp.domain.protocols.steps import LAST_USE, StandRule
from fieldapp.domain.protocols.stood import DOUBT, FAILS, Stood
from fieldapp.domain.protocols.visit import Visit


def deviations(visit: Visit) -> tuple[Deviation, ...]:
    """Return every deviation of the visit, found ones first, each with what a person said of it."""
    found = [
        *_answers(visit),
        *_after_stop(visit),
        *_stands(visit),
        *_runs(visit),
        *of_draws(visit),
        *_absent(visit),
    ]
    return tuple(_with_stated(visit, found))


def _answers(visit: Visit) -> Iterable[Deviation]:
    """Tell answers that are deviations; an answer given again does not take the first back."""
    for one in (*visit.given, *visit.seen.answered):
        kind = _kind_of(visit, one)
        if kind:
            yield make(kind, visit.kept, [one.hash], question=one.question, answer=one.answer)


def _kind_of(visit: Visit, one: Answer) -> str:
    ask = visit.asks.get(one.question)
    if ask is None or not ask.answers:
        return ""
    # an answer that the document does not offer says something, though nobody knows what
    return ask.deviates.get(one.answer, "" if one.answer in ask.answers else "not-as-expected")


def _after_stop(visit: Visit) -> Iterable[Deviation]:
    """Tell draws that were made although an answer had ended the visit."""
    drawn = [one for n in visit.kept for one in visit.seen.fills.get(n, ())]
    drawn.sort(key=lambda one: one.position)
    places = [one.position for one in drawn]
    until: dict[str, int] = {}
    for one in reversed((*visit.given, *visit.seen.answered)):
        end = until.get(one.question, places[-1] + 1 if places else 0)
        until[one.question] = one.position
        outcome = visit.outcome(one)
        if outcome and not _kind_of(visit, one):
            late = drawn[bisect_left(places, one.position) : bisect_left(places, end)]
            if late:
                draws = sorted({each.fact.draw for each in late})
                yield make("drawn-after-stop", draws, [one.hash, *late], outcome=outcome)


def _stands(visit: Visit) -> Iterable[Deviation]:
    """Tell the stand before each draw that asks for one: as believed then, and as told since."""
    for filling in visit.fillings:
        began = visit.seen.began(filling.draws)
        if filling.rule is None or began is None:
            continue
        kinds: set[str] = set()
        believed: Stood | None = None
        for stood in visit.stands_told(filling):
            kind = _kind_of_stand(stood, believed, filling.rule)
            believed = believed or stood
            if kind and kind not in kinds:
                kinds.add(kind)
                evidence: list[Noted | str] = [stood.evidence, began]
                yield make(kind, filling.kept, evidence, **stood.values(filling.rule))


def _kind_of_stand(stood: Stood, believed: Stood | None, rule: StandRule) -> str:
    """Return the deviation of a stand; of one told after the draw, only what the late use did."""
    if believed is None or stood.unsure:
        return stood.deviation(rule)
    late = stood.evidence != believed.evidence
    return "tap-used-in-stand" if late and stood.verdict(rule) in (FAILS, DOUBT) else ""


def _runs(visit: Visit) -> Iterable[Deviation]:
    """Tell draws that were made before the water had run to waste long enough."""
    for station in visit.stations:
        if not isinstance(station, Waste):
            continue
        began = visit.seen.began(station.before)
        if began and not visit.ran_enough(station.step, began):
            yield make("run-short", station.before, [began], minimum=station.step.minimum)


def _absent(visit: Visit) -> Iterable[Deviation]:
    """Tell what is missing, which can be known once the visit is closed and water was drawn."""
    closed = visit.seen.closed
    drawn = [draw for draw in visit.kept if visit.seen.filled(draw)]
    if closed is None or not drawn:
        return
    missing = [name for name in visit.questions if name not in visit.answers and name != LAST_USE]
    if missing:
        yield make("not-asked", drawn, [closed], questions=tuple(missing))
    for filling in visit.fillings:
        taken = [draw for draw in filling.draws if visit.seen.filled(draw)]
        kept = [draw for draw in filling.kept if draw in taken]
        if filling.rule and kept and not visit.stands_told(filling):
            yield make("stand-unknown", kept, [closed], minimum=filling.rule.minimum)
        gone = [draw for draw in filling.draws if taken and draw < taken[-1] and draw not in taken]
        if gone and kept:
            yield make("wrong-order", kept, [closed], missing=tuple(gone))


def _with_stated(visit: Visit, found: list[Deviation]) -> list[Deviation]:
    """Put what people stated beside what was found; what was found and stated is one deviation."""
    places = {one.kind: place for place, one in reversed(list(enumerate(found)))}
    for one in visit.seen.stated:
        kind, draws = one.fact.deviation, tuple(one.fact.draws)
        place = places.get(kind)
        if place is not None and _shares(draws, found[place].draws):
            found[place] = _joined(found[place], one)
            continue
        stated = make(kind, draws, [one], step=one.fact.step)
        found.append(replace(stated, detected=False, reason=one.fact.reason))
    return found


def _shares(stated: tuple[int, ...], detected: tuple[int, ...]) -> bool:
    return not stated or not detected or bool(set(stated) & set(detected))


def _joined(found: Deviation, stated: Noted) -> Deviation:
    reason = stated.fact.reason
    joined = found.reason if reason in ("", found.reason) else f"{found.reason} {reason}".strip()
    return replace(found, evidence=(*found.evidence, stated.entry.hash), reason=joined)
