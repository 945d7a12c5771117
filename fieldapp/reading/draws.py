"""The draws that a round file plans for one visit, against what the protocol labels."""

from collections.abc import Mapping
from typing import Any

from fieldapp.domain.protocols import Protocol
from fieldapp.reading.part import Part

PURPOSES = ("compliance", "investigation", "request", "blank", "duplicate")
CONTROLS = ("blank", "duplicate")
MOST_DRAWS = 99


def read_draws(
    part: Part, protocol: Protocol | None, *, keep_poured: bool
) -> tuple[Mapping[str, Any], ...]:
    """Return the labelled draws of a visit, each with its purpose, in order.

    Without a known ``protocol`` only their own form is checked.
    """
    draws: dict[int, Mapping[str, Any]] = {}
    named: set[int] = set()
    for one in part.blocks("draws"):
        one.only("draw", "purpose", "kind")
        number = one.whole("draw", 1, MOST_DRAWS)
        purpose = one.word("purpose", PURPOSES)
        kind = one.text("kind", optional=True)
        if number and number in named:
            one.fault("draw-twice", "draw", number)
        if purpose == "blank" and any(drawn["purpose"] == "blank" for drawn in draws.values()):
            one.fault("blank-twice", "purpose", purpose)
        named.add(number)
        if number and purpose and _allowed(one, protocol, number, purpose, kind, keep_poured):
            extra = {"kind": kind} if purpose in CONTROLS else {}
            draws[number] = {"draw": number, "purpose": purpose, **extra}
    if protocol:
        _check_whole(part, protocol, named, keep_poured)
    return tuple(draws[number] for number in sorted(draws))


def _check_whole(part: Part, protocol: Protocol, named: set[int], keep_poured: bool) -> None:
    labelled = _labelled(protocol, keep_poured=False)
    if part.value.get("draws") == []:
        part.fault("no-draw", "draws", protocol=protocol.id, right=labelled)
        return
    if not part.has("draws") or not isinstance(part.value["draws"], list):
        return
    # Half a pair answers no question; a blank alone has no visit to speak for.
    for number in labelled:
        if number not in named and 0 not in named:
            part.fault("draw-left-out", "draws", number, protocol=protocol.id)


def _allowed(
    one: Part, protocol: Protocol | None, number: int, purpose: str, kind: str, keep_poured: bool
) -> bool:
    if purpose in CONTROLS or kind in CONTROLS:
        return _control_allowed(one, protocol, number, purpose, kind)
    if protocol is None:
        return False
    kinds = {d.draw: d.kind for d in protocol.draws()}
    labelled = _labelled(protocol, keep_poured=keep_poured)
    if number not in kinds:
        last = max(kinds, default=0)
        one.fault("draw-unknown", "draw", number, protocol=protocol.id, right=labelled, last=last)
    elif number not in labelled:
        one.fault("draw-poured", "draw", number, protocol=protocol.id)
    elif kinds[number] in CONTROLS:
        values = {"given": kinds[number], "right": kinds[number]}
        one.fault("kind-clash", "purpose", purpose, **values)
    elif kind and kind != kinds[number]:
        one.fault(
            "kind-of-protocol", "kind", kind, draw=number, right=kinds[number], protocol=protocol.id
        )
    else:
        return True
    return False


def _control_allowed(
    one: Part, protocol: Protocol | None, number: int, purpose: str, kind: str
) -> bool:
    kinds = {d.draw: d.kind for d in protocol.draws()} if protocol else {}
    if purpose in CONTROLS and not kind:
        one.fault("kind-missing", "kind", purpose)
    elif purpose != kind:
        right = purpose if purpose in CONTROLS else kind
        one.fault("kind-clash", "purpose", purpose, given=kind, right=right)
    elif kinds.get(number) == purpose:
        return True
    elif protocol and number in kinds:
        values = {"draw": number, "right": kinds[number], "last": max(kinds)}
        one.fault("control-number", "draw", purpose, protocol=protocol.id, **values)
    else:
        return True
    return False


def _labelled(protocol: Protocol, *, keep_poured: bool) -> tuple[int, ...]:
    return tuple(d.draw for d in protocol.draws() if d.keep or keep_poured)
