"""One entry: a signed line of JSON with its place in a log. Bytes are kept, never re-made."""

import hashlib
import json
import re
import secrets
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sync.encoding import b64, read_json, unb64, write_json
from sync.errors import BadEntry, Unwritable
from sync.keys import DeviceKey, key_id, verify_signature

__all__ = [
    "Entry",
    "Realm",
    "b64",
    "compose",
    "conceal",
    "digest",
    "new_log_id",
    "pae",
    "private_part",
    "reveal",
    "scopes_of",
    "unb64",
    "verify",
]

ENVELOPE_VERSION = 1
MOST_WRITTEN = 8 * 1024  # bytes of a body; the author may be allowed more for a kept document
MOST_READ = 32 * 1024  # bytes of a body that is carried inside another, with room to spare
MOST_PRIVATE = 32 * 1024  # bytes of a private part
SALT_BYTES = 16
SALT_KEY = "salt"
LOG_ID = re.compile(r"[A-Za-z0-9_-]{22}")
CARRIED = "log.carried"
OPENED = "log.opened"


@dataclass(frozen=True)
class Realm:
    """The application whose facts are replicated; its name is bound into every signature."""

    name: str

    @property
    def entry_type(self) -> str:
        """Return the media type under which entries are signed."""
        return self._type("entry")

    @property
    def acknowledgement_type(self) -> str:
        """Return the media type under which acknowledgements are signed."""
        return self._type("acknowledgement")

    @property
    def session_type(self) -> str:
        """Return the media type under which a device answers a challenge."""
        return self._type("session")

    @property
    def enrolment_type(self) -> str:
        """Return the media type under which a device proves that the key it enrols is its own."""
        return self._type("enrolment")

    @property
    def wire_type(self) -> str:
        """Return the media type of requests and answers."""
        return self._type("sync")

    def _type(self, what: str) -> str:
        return f"application/vnd.{self.name}.{what}.v1+json"


@dataclass(frozen=True, slots=True)
class Entry:
    """One signed fact as stored: exact body bytes, signature, and the private part if held."""

    log: str
    seq: int
    hash: bytes
    body: bytes
    sig: bytes
    private: bytes | None = None

    def fields(self) -> dict[str, Any]:
        """Return the body as a dictionary; only of an entry that was verified."""
        fields: dict[str, Any] = json.loads(self.body)
        return fields


def new_log_id() -> str:
    """Return a new random log id: 22 characters, base64url of 16 bytes."""
    return b64(secrets.token_bytes(16))


def pae(type_: str, body: bytes) -> bytes:
    """Return the bytes that are hashed and signed.

    Source:
        DSSE 1.0.2, "PAE": both parts with their lengths, so no type can pass for another.
    """
    kind = type_.encode("utf-8")
    return b"DSSEv1 %d %s %d %s" % (len(kind), kind, len(body), body)


def digest(realm: Realm, body: bytes) -> bytes:
    """Return the 32-byte name of an entry: SHA-256 over its signed bytes."""
    return hashlib.sha256(pae(realm.entry_type, body)).digest()


def compose(
    realm: Realm,
    key: DeviceKey,
    fields: Mapping[str, Any],
    *,
    private: bytes | None = None,
    limit: int = MOST_WRITTEN,
) -> Entry:
    """Write and sign one entry.

    ``v``, ``key`` and ``priv`` are filled in where absent; where present they must be right.

    Raises:
        Unwritable: A value that has no one certain form, a wrong place, or too many bytes.
    """
    whole = {"v": ENVELOPE_VERSION, "key": key.id, **fields}
    if private is not None:
        whole.setdefault("priv", private_label(private))
    if whole["key"] != key.id:
        raise Unwritable(f"This fact names the key {whole['key']}, but {key.id} would sign it.")
    log, seq = whole.get("log"), whole.get("seq")
    if not _is_place(log, seq):
        raise Unwritable("This fact has no place in a log: give log and seq.")
    body = write_json(whole)
    if len(body) > limit:
        raise Unwritable(f"This fact takes {len(body)} bytes and {limit} are allowed. Shorten it.")
    _check_private(whole, private, Unwritable)
    signed = pae(realm.entry_type, body)
    return Entry(
        str(log), whole["seq"], hashlib.sha256(signed).digest(), body, key.sign(signed), private
    )


def verify(realm: Realm, entry: Entry, public_key: bytes) -> dict[str, Any]:
    """Return the fields of an entry after hash, signature, place and private part were checked.

    Nothing is parsed before the signature holds, and what is parsed is the buffer that was
    signed.

    Raises:
        BadEntry: With ``why``, the first thing that differs.
    """
    if len(entry.body) > MOST_READ:
        raise BadEntry(f"it has {len(entry.body)} bytes and {MOST_READ} are allowed")
    signed = pae(realm.entry_type, entry.body)
    if hashlib.sha256(signed).digest() != entry.hash:
        raise BadEntry("its hash is not that of its text")
    if not verify_signature(public_key, signed, entry.sig):
        raise BadEntry("its signature is not that of its author over this text")
    fields = read_json(entry.body)
    if not _is_place(fields.get("log"), fields.get("seq")):
        raise BadEntry("its text names no place in a log")
    if (fields["log"], fields["seq"]) != (entry.log, entry.seq):
        raise BadEntry("it stands in another place than its text says")
    if fields.get("key") != key_id(public_key):
        raise BadEntry("it names another key than the one that signed it")
    _check_shape(fields)
    _check_private(fields, entry.private, BadEntry)
    return fields


def conceal(fields: Mapping[str, Any], salt: bytes | None = None) -> tuple[bytes, dict[str, Any]]:
    """Return the private part's bytes with their salt, and the label that is signed instead.

    The salt keeps a telephone number from being guessed from its hash.
    """
    if SALT_KEY in fields:
        raise Unwritable(f"A private field cannot be called {SALT_KEY!r}. Rename it.")
    salt = secrets.token_bytes(SALT_BYTES) if salt is None else salt
    private = write_json({**fields, SALT_KEY: b64(salt)})
    if len(private) > MOST_PRIVATE:
        raise Unwritable(f"The private part takes {len(private)} bytes, {MOST_PRIVATE} allowed.")
    return private, private_label(private)


def reveal(private: bytes) -> dict[str, Any]:
    """Return the private fields without their salt."""
    fields = read_json(private)
    fields.pop(SALT_KEY, None)
    return fields


def private_label(private: bytes) -> dict[str, Any]:
    """Return what is signed of a private part: its SHA-256 and its length in bytes."""
    return {"h": b64(hashlib.sha256(private).digest()), "n": len(private)}


def private_part(fields: Mapping[str, Any]) -> Mapping[str, Any] | None:
    """Return the label of the private part, of a carried entry that of the entry inside."""
    holder = fields.get("data") if fields.get("kind") == CARRIED else fields
    label = holder.get("priv") if isinstance(holder, Mapping) else None
    return label if isinstance(label, Mapping) else None


def scopes_of(fields: Mapping[str, Any]) -> list[str]:
    """Return the scopes by which an entry is pulled, with those of an entry carried inside."""
    found = list(fields.get("scope") or [])
    data = fields.get("data")
    if fields.get("kind") == CARRIED and isinstance(data, Mapping):
        inner = data.get("scope")
        found += inner if isinstance(inner, list) else []
    return sorted({scope for scope in found if isinstance(scope, str)})


def _is_place(log: object, seq: object) -> bool:
    return (
        isinstance(log, str)
        and LOG_ID.fullmatch(log) is not None
        and isinstance(seq, int)
        and not isinstance(seq, bool)
        and 1 <= seq < 2**53
    )


def _check_shape(fields: Mapping[str, Any]) -> None:
    # What replication itself reads; the rest is for the application to judge, later.
    for name in ("prev", "dev", "kind"):
        if not isinstance(fields.get(name), str):
            raise BadEntry(f"its field {name!r} is not text")
    scope = fields.get("scope", [])
    if not isinstance(scope, list) or not all(isinstance(word, str) for word in scope):
        raise BadEntry("its scope is not a list of words")


def _check_private(
    fields: Mapping[str, Any],
    private: bytes | None,
    fault: type[BadEntry] | type[Unwritable],
) -> None:
    if private is None:
        return
    label = private_part(fields)
    if len(private) > MOST_PRIVATE or label is None:
        raise fault("it comes with a private part that its text does not name")
    if {"h": label.get("h"), "n": label.get("n")} != private_label(private):
        raise fault("its private part is not the one its text names")
