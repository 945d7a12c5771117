"""A device's request, its shape checked as a whole before any of it is acted on."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sync import wire
from sync.blobs import MOST_NAMED
from sync.ledger import Head

MOST_MARKS = 64  # places by which one log is compared; each is twice as far back


@dataclass(frozen=True, slots=True)
class Asked:
    """A request whose shape was checked; its entries were not."""

    heads: dict[str, Head | None]
    push: list[tuple[str, int, list[Any]]]
    returned: list[tuple[str, list[Any]]]
    want: dict[str, list[Head]]
    have: dict[str, dict[str, tuple[Head, str]]]  # with the sum of what is held up to there
    skip: frozenset[str]
    blobs: list[str]  # which the device would have central's word on

    @classmethod
    def read(cls, request: Mapping[str, Any]) -> "Asked":
        """Check the shape of the whole request before any of it is acted on."""
        push = [_read_push(piece) for piece in wire.read_list(request.get("push"), "push")]
        returned = [
            (wire.read_log(piece.get("log")), wire.read_list(piece.get("entries"), "entries"))
            for piece in (
                wire.read_mapping(value, "returned")
                for value in wire.read_list(request.get("returned"), "returned")
            )
        ]
        sent = sum(len(piece[2]) for piece in push) + sum(len(piece[1]) for piece in returned)
        if sent > wire.MOST_ENTRIES:
            raise wire.too_large(f"{sent} entries came and {wire.MOST_ENTRIES} are allowed")
        have = wire.read_mapping(request.get("have"), "have")
        if len(have) > wire.MOST_SCOPES:
            raise wire.malformed("too many scopes")
        return cls(
            heads=wire.read_heads(request.get("heads")),
            push=push,
            returned=returned,
            want={
                wire.read_log(log): [
                    head
                    for value in wire.read_list(marks, "want")[:MOST_MARKS]
                    if (head := wire.read_head(value))
                ]
                for log, marks in wire.read_mapping(request.get("want"), "want").items()
            },
            have={scope: _read_cursors(logs) for scope, logs in have.items()},
            skip=frozenset(
                wire.read_log(log) for log in wire.read_list(request.get("skip"), "skip")
            ),
            blobs=[
                wire.read_name(name)
                for name in wire.read_list(request.get("blobs"), "blobs")[:MOST_NAMED]
            ],
        )


def _read_push(value: object) -> tuple[str, int, list[Any]]:
    piece = wire.read_mapping(value, "push")
    first = piece.get("first")
    if type(first) is not int or first < 1:
        raise wire.malformed("a push does not say with which entry it begins")
    return wire.read_log(piece.get("log")), first, wire.read_list(piece.get("entries"), "entries")


def _read_cursors(value: object) -> dict[str, tuple[Head, str]]:
    found = {}
    for log, place in wire.read_heads(value).items():
        sum_ = wire.read_mapping(value, "have")[log].get("gist", "")
        if not isinstance(sum_, str):
            raise wire.malformed("a sum is no text")
        if place is not None:
            found[log] = (place, sum_)
    return found
