"""Acknowledgements: central's signed note that it holds a log up to a head."""

from dataclasses import dataclass
from typing import Any

from sync.encoding import b64, unb64, write_json
from sync.entry import LOG_ID, Realm, pae
from sync.errors import BadEntry
from sync.keys import DeviceKey, key_id, verify_signature


@dataclass(frozen=True, slots=True)
class Acknowledgement:
    """Central holds ``log`` up to ``seq``, whose entry has ``hash``, since ``at`` (UTC text)."""

    at: str
    hash: bytes
    key: str
    log: str
    seq: int
    sig: bytes

    @classmethod
    def sign(
        cls, realm: Realm, key: DeviceKey, *, at: str, log: str, seq: int, hash: bytes
    ) -> "Acknowledgement":
        """Sign that a log is held up to a head; only after the commit that made it so."""
        sig = key.sign(_signed_bytes(realm, at, hash, key.id, log, seq))
        return cls(at, hash, key.id, log, seq, sig)

    def verify(self, realm: Realm, public_key: bytes) -> None:
        """Check that central's key signed exactly this.

        Raises:
            BadEntry: Another key, or another text.
        """
        if self.key != key_id(public_key):
            raise BadEntry("the acknowledgement names another key than central's")
        signed = _signed_bytes(realm, self.at, self.hash, self.key, self.log, self.seq)
        if not verify_signature(public_key, signed, self.sig):
            raise BadEntry("the acknowledgement is not signed by central")

    def as_wire(self) -> dict[str, Any]:
        """Return the form that travels."""
        return {
            "at": self.at,
            "hash": b64(self.hash),
            "key": self.key,
            "log": self.log,
            "seq": self.seq,
            "sig": b64(self.sig),
        }

    @classmethod
    def from_wire(cls, value: object) -> "Acknowledgement":
        """Read the form that travels.

        Raises:
            BadEntry: Not the shape of an acknowledgement.
        """
        if not isinstance(value, dict):
            raise BadEntry("the acknowledgement is not an object")
        at, key, log, seq = (value.get(name) for name in ("at", "key", "log", "seq"))
        try:
            hash_, sig = unb64(value["hash"]), unb64(value["sig"])
        except (KeyError, ValueError) as fault:
            raise BadEntry("the acknowledgement has no readable hash and signature") from fault
        if not (isinstance(at, str) and isinstance(key, str) and isinstance(log, str)):
            raise BadEntry("the acknowledgement names no time, key and log")
        if type(seq) is not int or not LOG_ID.fullmatch(log):
            raise BadEntry("the acknowledgement names no place in a log")
        return cls(at, hash_, key, log, seq, sig)


def _signed_bytes(realm: Realm, at: str, hash_: bytes, key: str, log: str, seq: int) -> bytes:
    body = {"at": at, "hash": b64(hash_), "key": key, "log": log, "seq": seq}
    return pae(realm.acknowledgement_type, write_json(body))
