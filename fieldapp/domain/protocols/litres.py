"""Deviations of the draws: how full, which bottle, in which order, in one run or not."""

from collections.abc import Iterable
from typing import Any

from fieldapp.domain.deviations import bias_of
from fieldapp.domain.facts import BottleFilled, DrawPoured, TapOpened
from fieldapp.domain.protocols.seen import Noted
from fieldapp.domain.protocols.standing import Deviation
from fieldapp.domain.protocols.steps import Fill
from fieldapp.domain.protocols.visit import Visit

FILL_KINDS = {"below": "fill-below", "over": "fill-over", "spilled": "fill-spilled"}


def of_draws(visit: Visit) -> Iterable[Deviation]:
    """Tell every deviation of the litres and their bottles."""
    yield from _fills(visit)
    yield from _turns(visit)
    yield from _unscanned(visit)
    yield from _twice(visit)
    yield from _flow(visit)


def make(
    kind: str, draws: Iterable[int], evidence: Iterable[Noted | str], **values: Any
) -> Deviation:
    """Make a deviation that the program found; the same evidence is named once."""
    hashes = (one if isinstance(one, str) else one.entry.hash for one in evidence)
    return Deviation(
        kind=kind,
        bias=bias_of(kind),
        draws=tuple(draws),
        detected=True,
        evidence=tuple(dict.fromkeys(text for text in hashes if text)),
        values=values,
    )


def _fills(visit: Visit) -> Iterable[Deviation]:
    """Tell how full each litre is, and what that does to the kept ones behind it."""
    for filling in visit.fillings:
        for place, fill in enumerate(filling.fills):
            filled = visit.seen.filled(fill.draw)
            if filled is None:
                continue
            yield from _bottle(visit, fill, filled)
            kind = FILL_KINDS.get(filled.fact.fill)
            if kind is None or filling.blank:
                continue
            if fill.keep:
                yield make(kind, [fill.draw], [filled], volume_ml=_measured_ml(filled))
            behind = [one.draw for one in filling.fills[place + 1 :] if one.keep]
            if behind:
                yield make("litres-shifted", behind, [filled], draw=fill.draw, fill=kind)


def _measured_ml(filled: Noted) -> int:
    """Return the measured volume, 0 where nobody measured (R21)."""
    return getattr(filled.fact, "volume_ml", 0)


def _bottle(visit: Visit, fill: Fill, filled: Noted) -> Iterable[Deviation]:
    """Tell what is wrong with the bottle of one draw."""
    if isinstance(filled.fact, DrawPoured):
        if fill.keep:
            yield make("poured-instead", [fill.draw], [filled])
        return
    if not fill.keep or not isinstance(filled.fact, BottleFilled):
        return
    bottle = filled.fact.bottle
    stood = [one for one in visit.seen.sets.get(fill.draw, ()) if _before(one, filled)]
    if stood and stood[-1].fact.bottle != bottle:
        yield make("wrong-bottle", [fill.draw], [stood[-1], filled], bottle=bottle)
    printed = visit.seen.issued.get(bottle)
    if printed and printed.draw and (printed.visit, printed.draw) != (visit.visit, fill.draw):
        yield make(
            "wrong-bottle",
            [fill.draw],
            [filled],
            bottle=bottle,
            printed_for=printed.visit,
            printed_draw=printed.draw,
        )


def _before(one: Noted, other: Noted) -> bool:
    """Say whether a fact came before another, by its time or by its place in the record."""
    return one.position < other.position or one.order < other.order


def _turns(visit: Visit) -> Iterable[Deviation]:
    latest: Noted | None = None
    fills = [fill for filling in visit.fillings if not filling.blank for fill in filling.fills]
    for fill in sorted(fills, key=lambda fill: fill.draw):
        filled = visit.seen.filled(fill.draw)
        if filled is None or not filled.sure:
            continue
        if latest and filled.order < latest.order:
            draws = (latest.fact.draw, fill.draw)
            yield make("wrong-order", sorted(draws), [latest, filled], draw=fill.draw)
        else:
            latest = filled


def _unscanned(visit: Visit) -> Iterable[Deviation]:
    """Tell bottles that were not stood in order before the water ran; a resident scans nothing."""
    for filling in visit.fillings:
        opened = visit.seen.opened(filling.draws)
        for draw in filling.kept:
            filled = visit.seen.filled(draw)
            if filled is None or not isinstance(filled.fact, BottleFilled):
                continue
            began = min([*opened[:1], filled], key=lambda one: one.position)
            sets = visit.seen.sets.get(draw, ())
            scanned = any(_before(one, began) or not one.sure for one in sets)
            if not scanned and filled.sure and filled.fact.who_drew == "sampler":
                yield make("wrong-order", [draw], [*sets[:1], began, filled], unscanned=draw)


def _twice(visit: Visit) -> Iterable[Deviation]:
    by_bottle: dict[str, list[Noted]] = {}
    for draw, fills in sorted(visit.seen.fills.items()):
        if len(fills) > 1:
            yield make("filled-twice", [draw], fills, draw=draw)
        for one in fills[:1]:
            if isinstance(one.fact, BottleFilled):
                by_bottle.setdefault(one.fact.bottle, []).append(one)
    for bottle, fills in by_bottle.items():
        if len(fills) > 1:
            draws = [one.fact.draw for one in fills]
            yield make("filled-twice", draws, fills, bottle=bottle)


def _flow(visit: Visit) -> Iterable[Deviation]:
    """Tell a tap that was closed and opened again within a run (R2)."""
    for filling in visit.fillings:
        if len(filling.fills) == 1:
            continue
        opened, closed = visit.seen.opened(filling.draws), visit.seen.closings(filling.draws)
        state, evidence = "", []
        for tap in sorted((*opened, *closed), key=lambda one: one.order):
            opens = isinstance(tap.fact, TapOpened)
            evidence.append(tap)
            if opens and state == "closed":
                yield make("interrupted-flow", filling.kept, evidence)
                break
            state = "open" if opens else "closed"
