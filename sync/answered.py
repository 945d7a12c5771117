"""Central's answer as a device reads it: all of it checked for shape before any is acted on."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sync import wire
from sync.acknowledgement import Acknowledgement
from sync.errors import BadEntry, NoContact, Refused
from sync.ledger import Head
from sync.replica import Replica


@dataclass(frozen=True, slots=True)
class Said:
    """What central says of one log: its head, and its hash at the place both can compare."""

    there: Head | None
    at: int
    at_hash: str


@dataclass(frozen=True, slots=True)
class Answered:
    """One answer; its acknowledgements are verified, its entries are not yet."""

    heads: dict[str, Said]
    notes: dict[str, Acknowledgement]
    refused: list[dict[str, Any]]
    tails: list[tuple[str, list[Any]]]
    pulls: list[tuple[str, str, list[Any]]]
    regressed: list[str]
    denied: list[str]
    more: bool
    missing: dict[str, int]  # blobs that central lacks, each with the bytes it has
    received: list[str]  # blobs that it holds whole

    @classmethod
    def read(cls, replica: Replica, answer: Mapping[str, Any]) -> "Answered":
        """Read an answer.

        Raises:
            NoContact: It is not what central would say; nothing of it is believed.
        """
        try:
            return cls(
                heads={
                    wire.read_log(log): _said(value)
                    for log, value in wire.read_mapping(answer["heads"], "heads").items()
                },
                notes=_notes(replica, answer["acknowledgements"]),
                refused=[_refusal(value) for value in wire.read_list(answer["refused"], "refused")],
                tails=[
                    (wire.read_log(piece["log"]), wire.read_list(piece["entries"], "entries"))
                    for piece in wire.read_list(answer["tail"], "tail")
                ],
                pulls=[_pull(piece) for piece in wire.read_list(answer["pull"], "pull")],
                regressed=[
                    wire.read_log(log) for log in wire.read_list(answer["regressed"], "regressed")
                ],
                denied=[_word(scope) for scope in wire.read_list(answer["denied"], "denied")],
                more=answer["more"] is True,
                missing=dict(_missing(one) for one in _blobs(answer, "missing")),
                received=[wire.read_name(one) for one in _blobs(answer, "received")],
            )
        except (BadEntry, Refused) as fault:
            raise NoContact(f"the answer does not hold ({fault})") from fault
        except (LookupError, TypeError, AttributeError) as fault:
            raise NoContact("the answer has another shape than central's") from fault


def _said(value: Any) -> Said:
    at, at_hash = value["at"], value["at_hash"]
    if type(at) is not int or at < 0:
        raise wire.malformed("a place is no number")
    return Said(wire.read_head(value), at, _word(at_hash))


def _notes(replica: Replica, values: object) -> dict[str, Acknowledgement]:
    pin = replica.hooks.central()
    if pin is None:
        raise NoContact("this device is enrolled nowhere")
    found = {}
    for value in wire.read_list(values, "acknowledgements"):
        note = Acknowledgement.from_wire(value)
        note.verify(replica.realm, pin.public_key)
        found[note.log] = note
    return found


def _refusal(value: Any) -> dict[str, Any]:
    refusal = wire.read_mapping(value, "refused")
    return {
        "log": wire.read_log(refusal["log"]),
        "at": refusal["at"],
        "why": _word(refusal["why"]),
        "says": _word(refusal["says"]),
    }


def _pull(piece: Any) -> tuple[str, str, list[Any]]:
    entries = wire.read_list(piece["entries"], "entries")
    return _word(piece["scope"]), wire.read_log(piece["log"]), entries


def _blobs(answer: Mapping[str, Any], which: str) -> list[Any]:
    return wire.read_list(answer.get(f"blobs_{which}"), f"blobs_{which}")


def _missing(value: Any) -> tuple[str, int]:
    name, have = wire.read_name(value["h"]), value["have"]
    if type(have) is not int or have < 0:
        raise wire.malformed("an offset is no number")
    return name, have


def _word(value: object) -> str:
    if not isinstance(value, str):
        raise wire.malformed("a word is no text")
    return value
