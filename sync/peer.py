"""The other side as this device sees it: something that answers a path and a body."""

import gzip
import io
import json
import secrets
import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

from sync import wire
from sync.blobs import NONCE, OFFSET, Readable
from sync.entry import Realm
from sync.errors import NoContact

PROBLEM_TYPE = "application/problem+json"  # RFC 9457
PIECE_TYPE = "application/octet-stream"
OK = 200
NO_CONTENT = 204
UNAUTHORIZED = 401
TOO_LARGE = 413
UNPACK_STEP = 64 * 1024


@dataclass(frozen=True, slots=True)
class Answer:
    """A code of HTTP and the JSON object that came with it, known to be of our making."""

    code: int
    body: dict[str, Any] = field(default_factory=dict)
    retry_after: int | None = None


@dataclass(frozen=True, slots=True)
class Carried:
    """What central answered to a piece of a blob: a code of HTTP, where the blob ends there."""

    code: int
    offset: int | None = None
    says: str = ""
    retry_after: int | None = None


class Peer(Protocol):
    """Something that carries one request to central and its answer back."""

    def send(self, path: str, body: Mapping[str, Any], *, token: str = "") -> Answer:
        """Return the answer to one request.

        Raises:
            NoContact: Nothing came, or nothing that is surely central's.
        """

    def carry(
        self, method: str, path: str, headers: Mapping[str, str], data: bytes, *, token: str = ""
    ) -> Carried:
        """Return the answer to HEAD or PATCH of a blob; it may be asked by two threads at once.

        Raises:
            NoContact: Nothing came, or nothing that is surely central's.
        """


class Answering(Protocol):
    """The server side, as ``sync.endpoint.Endpoint`` is."""

    def answer(
        self, method: str, path: str, headers: Mapping[str, str], body: bytes, remote: str
    ) -> tuple[int, list[tuple[str, str]], bytes]:
        """Return code, headers and body."""

    def blob(
        self, method: str, path: str, headers: Mapping[str, str], body: Readable
    ) -> tuple[int, list[tuple[str, str]], bytes]:
        """Return code, headers and body of the answer to a piece of a blob."""


class LoopbackPeer:
    """Central in the same process, by the same bytes as over a line."""

    def __init__(self, endpoint: Answering, realm: Realm, remote: str = "loopback") -> None:
        self.endpoint, self.realm, self.remote = endpoint, realm, remote

    def send(self, path: str, body: Mapping[str, Any], *, token: str = "") -> Answer:
        """Return the endpoint's answer to one request."""
        headers, raw = encode(self.realm, body, token)
        code, answered, packed = self.endpoint.answer("POST", path, headers, raw, self.remote)
        named = {name.lower(): value for name, value in answered}
        if named.get("content-encoding") == "gzip":
            packed = unpack(packed, wire.MOST_WIRE_BYTES * 2)
        return decode(self.realm, code, named, packed)

    def carry(
        self, method: str, path: str, headers: Mapping[str, str], data: bytes, *, token: str = ""
    ) -> Carried:
        """Return the endpoint's answer to a piece of a blob."""
        sent = piece_headers(headers, data, token)
        code, answered, raw = self.endpoint.blob(method, path, sent, io.BytesIO(data))
        return carried(code, {name.lower(): value for name, value in answered}, raw, sent[NONCE])


def piece_headers(headers: Mapping[str, str], data: bytes, token: str) -> dict[str, str]:
    """Return the headers of one piece of a blob, with a nonce that the answer has to repeat."""
    return {
        **headers,
        "Content-Type": PIECE_TYPE,
        "Content-Length": str(len(data)),
        "Authorization": f"Bearer {token}",
        NONCE: secrets.token_urlsafe(16),
    }


def carried(code: int, headers: Mapping[str, str], raw: bytes, nonce: str) -> Carried:
    """Return an answer to a piece if it is one of ours; ``headers`` have lower-case names.

    Raises:
        NoContact: It does not repeat the nonce of the request.
    """
    if headers.get(NONCE.lower()) != nonce:
        raise NoContact(f"something else answered to a photo ({code})")
    stated, after = headers.get(OFFSET.lower(), ""), headers.get("retry-after", "")
    says = ""
    if headers.get("content-type", "").startswith(PROBLEM_TYPE) and raw:
        try:
            says = str(json.loads(raw)["detail"])
        except (ValueError, LookupError, TypeError, RecursionError):
            raise NoContact("the answer was cut short or garbled") from None
    return Carried(
        code,
        int(stated) if stated.isascii() and stated.isdigit() and len(stated) < 16 else None,
        says,
        int(after) if after.isascii() and after.isdigit() else None,
    )


def encode(realm: Realm, body: Mapping[str, Any], token: str) -> tuple[dict[str, str], bytes]:
    """Return the headers and the packed bytes of a request."""
    headers = {
        "Content-Type": realm.wire_type,
        "Content-Encoding": "gzip",
        "Accept": f"{realm.wire_type}, {PROBLEM_TYPE}",
        "Accept-Encoding": "gzip",
    }
    if token:
        headers["Authorization"] = f"Bearer {token}"
    text = json.dumps(body, ensure_ascii=False, separators=(",", ":")).encode("utf-8")
    return headers, gzip.compress(text, compresslevel=6, mtime=0)


def decode(realm: Realm, code: int, headers: Mapping[str, str], raw: bytes) -> Answer:
    """Return an answer if it is one of ours; a page of a captive portal is not.

    ``headers`` have lower-case names, ``raw`` is unpacked.

    Raises:
        NoContact: Another media type, or no JSON object.
    """
    kind = headers.get("content-type", "").partition(";")[0].strip().lower()
    after = headers.get("retry-after", "")
    retry_after = int(after) if after.isascii() and after.isdigit() else None
    wanted = realm.wire_type if code == OK else PROBLEM_TYPE
    if kind != wanted:
        if code == TOO_LARGE:  # also said by what stands before central
            return Answer(code, {}, retry_after)
        raise NoContact(f"something else answered ({code}, {kind or 'no type'})", retry_after)
    try:
        body = json.loads(raw)
    except (ValueError, RecursionError) as fault:
        raise NoContact("the answer was cut short or garbled", retry_after) from fault
    if not isinstance(body, dict):
        raise NoContact("the answer is no object", retry_after)
    return Answer(code, body, retry_after)


def unpack(packed: bytes, most: int) -> bytes:
    """Return gunzipped bytes, at most so many.

    Raises:
        ValueError: Damaged, cut short, or larger than that.
    """
    inflate = zlib.decompressobj(wbits=31)  # gzip only
    try:
        raw = inflate.decompress(packed, most + 1)
    except zlib.error as fault:
        raise ValueError("The packed bytes are damaged.") from fault
    if len(raw) > most:
        raise OverflowError(f"More than {most} bytes came out.")
    if not inflate.eof:
        raise ValueError("The packed bytes are cut short.")
    return raw
