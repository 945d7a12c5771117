"""Steps and rules out of the tables of a document."""

from collections.abc import Callable, Sequence
from datetime import timedelta
from typing import Any

from fieldapp.domain.deviations import DEVIATIONS
from fieldapp.domain.protocols.document import ID, Sheet, Table
from fieldapp.domain.protocols.steps import (
    LAST_USE,
    Ask,
    Fill,
    Look,
    Measure,
    Photograph,
    Run,
    Sign,
    StandRule,
    StandWait,
    Step,
    TapRule,
)

BREACHES = ("bar", "ask", "note")
QUIETS = ("tap", "building")
FLUSHES = ("forbidden", "required", "none")
WATERS = ("cold", "hot", "any")
AERATORS = ("leave", "remove", "any")
FILTERS = ("exclude", "bypass", "as-used")
FLOWS = ("as-used", "full", "fixed")
AFTERS = ("keep", "pour away")
SIGNERS = ("sampler", "resident")
DRAW_KINDS = ("first-draw", "sequential", "flushed", "random-daytime", "standing", "duplicate")
RESERVED = ("stand", "blank", "stand-doubt", "stand-long")
"""Ids and questions that the engine uses itself."""
MOST_DRAWS = 99
MOST_ML = 20_000
MOST_MM = 200
NO_TIME = timedelta(0)


def read_stand(sheet: Sheet) -> StandRule | None:
    """Return the stand before the visit, None where the protocol has none."""
    table = sheet.top.table("stand", optional=True)
    if table is None:
        return None
    rule = StandRule(
        minimum=table.duration("minimum") or NO_TIME,
        question_above=table.duration("question_above", optional=True),
        quiet=table.text("quiet", "building", QUIETS),
        flush_before=table.text("flush_before", "forbidden", FLUSHES),
        breach=table.text("breach", "ask", BREACHES),
        why=table.text("why", ""),
        source=table.text("source", ""),
        question_source=table.text("question_source", ""),
    )
    if rule.question_above is not None and rule.question_above <= rule.minimum:
        sheet.fault((*table.path, "question_above"), "", "out-of-range", "longer than minimum")
    table.close()
    return rule


def read_tap(sheet: Sheet) -> TapRule:
    """Return how the tap is to be found and left."""
    table = sheet.top.table("tap", optional=True)
    if table is None:
        return TapRule()
    rule = TapRule(
        water=table.text("water", "cold", WATERS),
        aerator=table.text("aerator", "leave", AERATORS),
        filter=table.text("filter", "exclude", FILTERS),
        flow=table.text("flow", "as-used", FLOWS),
        source=table.text("source", ""),
    )
    table.close()
    return rule


def read_steps(sheet: Sheet, analytes: Sequence[str]) -> tuple[Step | None, ...]:
    """Return the steps in their order, None for one whose kind could not be told."""
    return tuple(_step(table, sheet, analytes) for table in sheet.top.tables("step"))


def _step(table: Table, sheet: Sheet, analytes: Sequence[str]) -> Step | None:
    common = {
        "id": table.name("id", ""),
        "why": table.text("why", ""),
        "source": table.text("source", ""),
        "breach": table.text("breach", "ask", BREACHES),
    }
    kinds = [name for name in table.names() if name in READ]
    if len(kinds) != 1:
        rule = "twice" if kinds else "missing"
        sheet.fault(table.path, " ".join(kinds), rule, "one of " + " | ".join(READ))
    step = None
    for kind in kinds:
        inner = table.table(kind)
        if inner is not None:
            step = READ[kind](inner, common, analytes)
            inner.close()
    table.close(" | ".join((*common, *READ)))
    if common["id"] in RESERVED:
        sheet.fault((*table.path, "id"), common["id"], "twice", "an id the program does not use")
    return step


def _named(common: dict[str, str], name: str) -> dict[str, Any]:
    """Give a step without an id one made from what it is about."""
    return {**common, "id": common["id"] or name}


def _ask(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    question = table.name("question")
    stated = question == LAST_USE
    answers = table.names_in("answers", optional=stated)
    if stated and answers:
        table.sheet.fault((*table.path, "answers"), list(answers), "not-one-of", "no answers")
    if question in RESERVED:
        table.sheet.fault((*table.path, "question"), question, "twice", "a name of its own")
    ask = Ask(
        **_named(common, question),
        question=question,
        says=table.text("says", ""),
        answers=answers,
        stops_if=table.texts_by("stops_if", answers),
        deviates=table.texts_by("deviates", answers),
        words=table.texts_by("words", answers),
    )
    for answer, kind in ask.deviates.items():
        if kind not in DEVIATIONS:
            path = (*table.path, "deviates", answer)
            table.sheet.fault(path, kind, "not-declared", " | ".join(DEVIATIONS))
    for answer, outcome in ask.stops_if.items():
        if not ID.fullmatch(outcome):
            table.sheet.fault((*table.path, "stops_if", answer), outcome, "out-of-range", "unfit")
    return ask


def _look(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    at = table.name("at")
    return Look(
        **_named(common, at), at=at, expect=table.name("expect"), says=table.text("says", "")
    )


def _run(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    return Run(
        **_named(common, "run"),
        minimum=table.duration("minimum") or NO_TIME,
        flow=table.text("flow", "as-used", FLOWS),
        water=table.text("water", "cold", WATERS),
    )


def _stand(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    minimum = table.duration("minimum") or NO_TIME
    maximum = table.duration("maximum", optional=True)
    if maximum is not None and maximum <= minimum:
        table.sheet.fault((*table.path, "maximum"), "", "out-of-range", "longer than minimum")
    return StandWait(**_named(common, "stand-here"), minimum=minimum, maximum=maximum)


def _fill(table: Table, common: dict[str, str], analytes: Sequence[str]) -> Step:
    draw = table.whole("draw", 1, MOST_DRAWS)
    fill = Fill(
        **_named(common, f"draw-{draw}"),
        draw=draw,
        volume_ml=table.whole("volume_ml", 1, MOST_ML),
        kind=table.text("kind", "sequential", DRAW_KINDS),
        mouth_min_mm=table.whole("mouth_min_mm", 1, MOST_MM, 0),
        analyse=table.names_in("analyse", optional=True),
        keep=table.text("after", "keep", AFTERS) == "keep",
        running_on=table.flag("running_on", False),
    )
    strange = [one for one in fill.analyse if one not in analytes]
    if strange or (fill.analyse and not fill.keep):
        right = " | ".join(analytes) if strange else "nothing, for it is poured away"
        table.sheet.fault((*table.path, "analyse"), list(fill.analyse), "not-declared", right)
    return fill


def _measure(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    quantity = table.name("quantity")
    return Measure(
        **_named(common, f"measure-{quantity}"),
        quantity=quantity,
        unit=table.text("unit"),
        within=table.duration("within", optional=True),
    )


def _photograph(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    of = table.name("of")
    return Photograph(**_named(common, f"photo-{of}"), of=of, wanted=table.flag("wanted", True))


def _sign(table: Table, common: dict[str, str], _: Sequence[str]) -> Step:
    who = table.text("who", choices=SIGNERS)
    return Sign(**_named(common, f"sign-{who}"), who=who)


READ: dict[str, Callable[[Table, dict[str, str], Sequence[str]], Step]] = {
    "ask": _ask,
    "look": _look,
    "run": _run,
    "stand": _stand,
    "fill": _fill,
    "measure": _measure,
    "photograph": _photograph,
    "sign": _sign,
}
