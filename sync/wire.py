"""What travels: entries, heads and pieces of logs as JSON, read with distrust."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sync.encoding import b64, read_json, unb64
from sync.entry import LOG_ID, Entry, Realm, digest
from sync.errors import BadEntry, Refused
from sync.ledger import Head
from sync.shelf import is_name

PROTO = 1
MOST_ENTRIES = 500  # in one exchange, each way
MOST_ENTRY_BYTES = 1 << 20  # bodies and private parts of one exchange, each way
MOST_WIRE_BYTES = 4 << 20  # the JSON around them, quoted and unpacked
MOST_SCOPES = 1000
HASH_BYTES = 32


@dataclass(frozen=True, slots=True)
class Piece:
    """Some entries of one log, in order, as sent: not yet verified."""

    log: str
    first: int
    entries: tuple[Entry, ...]
    scope: str = ""


@dataclass(frozen=True, slots=True)
class Claim:
    """Who an entry says wrote it; read before it is verified, to find the key to do it with."""

    dev: str
    key: str
    log: str
    seq: int


def claim(body: bytes) -> Claim:
    """Read who says to have written an entry; nothing else of it may be used yet.

    Raises:
        BadEntry: The text names nobody.
    """
    fields = read_json(body)
    dev, key, log, seq = (fields.get(name) for name in ("dev", "key", "log", "seq"))
    if not (isinstance(dev, str) and isinstance(key, str) and isinstance(log, str)):
        raise BadEntry("its text names no author")
    if type(seq) is not int or not 1 <= seq < 2**53 or not LOG_ID.fullmatch(log):
        raise BadEntry("its text names no place in a log")
    return Claim(dev, key, log, seq)


def pack(entry: Entry, *, private: bool = True) -> dict[str, str]:
    """Return an entry as it travels: body text, signature, and the private part if allowed."""
    packed = {"b": entry.body.decode("utf-8"), "s": b64(entry.sig)}
    if private and entry.private is not None:
        packed["p"] = entry.private.decode("utf-8")
    return packed


def pack_all(entries: Sequence[Entry], *, private: bool = True) -> list[dict[str, str]]:
    """Return entries as they travel."""
    return [pack(entry, private=private) for entry in entries]


def unpack(realm: Realm, value: object) -> Entry:
    """Return an entry as received, hash computed here, place as its text claims.

    Raises:
        BadEntry: Not the shape of an entry.
    """
    if not isinstance(value, Mapping):
        raise BadEntry("it is not an object")
    body, sig, private = value.get("b"), value.get("s"), value.get("p")
    if not isinstance(body, str) or not isinstance(sig, str):
        raise BadEntry("it has no body and signature")
    try:
        raw = body.encode("utf-8")
        signed = unb64(sig)
        shown = private.encode("utf-8") if isinstance(private, str) else None
    except ValueError as fault:
        raise BadEntry("its text or signature cannot be read") from fault
    said = claim(raw)
    return Entry(said.log, said.seq, digest(realm, raw), raw, signed, shown)


def pack_head(head: Head | None) -> dict[str, Any]:
    """Return a place as it travels; no entry at all is seq 0."""
    return {"seq": 0, "hash": ""} if head is None else {"seq": head.seq, "hash": b64(head.hash)}


def read_head(value: object) -> Head | None:
    """Return a place as received; None for seq 0.

    Raises:
        Refused: Not the shape of a place.
    """
    if isinstance(value, Mapping) and type(value.get("seq")) is int:
        seq, text = value["seq"], value.get("hash")
        if seq == 0:
            return None
        try:
            hash_ = unb64(text) if isinstance(text, str) else b""
        except ValueError:
            hash_ = b""
        if 0 < seq < 2**53 and len(hash_) == HASH_BYTES:
            return Head(seq, hash_)
    raise malformed("a head is not {seq, hash}")


def read_heads(value: object) -> dict[str, Head | None]:
    """Return places by log as received."""
    found = read_mapping(value, "heads")
    if not all(LOG_ID.fullmatch(log) for log in found):
        raise malformed("heads name something that is no log")
    return {log: read_head(head) for log, head in found.items()}


def read_mapping(value: object, what: str) -> Mapping[str, Any]:
    """Return an object as received, an absent one empty."""
    if value is None:
        return {}
    if not isinstance(value, Mapping):
        raise malformed(f"{what} is not an object")
    return value


def read_list(value: object, what: str) -> list[Any]:
    """Return a list as received, an absent one empty."""
    if value is None:
        return []
    if not isinstance(value, list):
        raise malformed(f"{what} is not a list")
    return value


def read_log(value: object) -> str:
    """Return a log id as received."""
    if isinstance(value, str) and LOG_ID.fullmatch(value):
        return value
    raise malformed("a log id is not 22 characters of base64url")


def read_name(value: object) -> str:
    """Return the name of a blob as received."""
    if isinstance(value, str) and is_name(value):
        return value
    raise malformed("a blob is not named by 64 hexadecimal digits")


def malformed(says: str) -> Refused:
    """Return the refusal of a request that no version of this program sends."""
    return Refused("malformed", f"The request cannot be read: {says}. Update the older program.")


def too_large(says: str) -> Refused:
    """Return the refusal of a request that has to be sent in smaller parts."""
    return Refused("too-large", f"The request is too large: {says}. Send less at a time.")
