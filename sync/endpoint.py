"""Central's door: enrol, open a session, exchange. Plain functions of bytes, for any server."""

import gzip
import hashlib
import json
import secrets
import threading
import time
from collections import OrderedDict, deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from sync import blobs, central, peer, wire
from sync.encoding import unb64, write_json
from sync.entry import Realm, pae
from sync.errors import Refused, SyncError
from sync.keys import verify_signature
from sync.replica import Replica

ROOT = "/sync/v1/"
TOKEN_BYTES = 32
TOKEN_S = 15 * 60.0
CHALLENGE_S = 60.0
MOST_CHALLENGES = 1000
MOST_TOKENS = 10_000
MOST_FAILURES = 5  # of enrolment from one address
FAILURES_S = 60.0
MOST_ADDRESSES = 10_000
SMALL = 1024  # bytes of an answer that is not worth packing

CODES = {
    "malformed": 400,
    "not-ours": 415,
    "no-session": 401,
    "not-enrolled": 403,
    "too-large": 413,
    "too-often": 429,
    "not-found": 404,
    "not-post": 405,
    "offset": 409,
    "wrong-bytes": 422,
}
Headers = list[tuple[str, str]]


def session_proof(realm: Realm, *, central_key: str, challenge: str, dev: str) -> bytes:
    """Return what a device signs to open a session; bound to this central and this challenge."""
    body = {"central": central_key, "challenge": challenge, "dev": dev}
    return pae(realm.session_type, write_json(body))


def enrolment_proof(realm: Realm, *, code: str, dev: str, public_key: str) -> bytes:
    """Return what a device signs to show that the key it enrols is its own."""
    body = {"code": code, "dev": dev, "public_key": public_key}
    return pae(realm.enrolment_type, write_json(body))


@dataclass(frozen=True, slots=True)
class _Session:
    dev: str
    key: str
    until: float


class Endpoint:
    """Answers requests of devices. Sessions are in memory: a restart only makes them renew."""

    def __init__(self, replica: Replica, *, seconds: Callable[[], float] = time.monotonic) -> None:
        self.replica = replica
        self._seconds = seconds
        self._lock = threading.Lock()
        self._challenges: OrderedDict[str, _Session] = OrderedDict()
        self._tokens: OrderedDict[bytes, _Session] = OrderedDict()
        self._failures = _Failures()
        self._door = blobs.Door(replica, seconds=seconds)

    def blob(
        self, method: str, path: str, headers: Mapping[str, str], body: blobs.Readable
    ) -> tuple[int, Headers, bytes]:
        """Return code, headers and body for HEAD or PATCH of a blob; the body is read in steps.

        The session is that of the exchange. The nonce comes back in a header.
        """
        named = {name.lower(): value for name, value in headers.items()}
        nonce: Headers = [(blobs.NONCE, named.get(blobs.NONCE.lower(), "")[:SMALL])]
        try:
            self._session_of(named)
            code, offset = self._door.answer(method, path.removeprefix(blobs.ROOT), named, body)
        except blobs.OffsetDiffers as refusal:
            code, kind, raw = self._problem(refusal, "")
            return code, [*kind, *nonce, (blobs.OFFSET, str(refusal.offset))], raw
        except Refused as refusal:
            code, kind, raw = self._problem(refusal, "")
            return code, [*kind, *nonce], raw
        place: Headers = [(blobs.OFFSET, str(offset)), ("Cache-Control", "no-store")]
        return code, [*place, *nonce], b""

    def answer(
        self, method: str, path: str, headers: Mapping[str, str], body: bytes, remote: str
    ) -> tuple[int, Headers, bytes]:
        """Return code, headers and body for one request; ``remote`` is the caller's address.

        Errors are problem details (RFC 9457) and never say what went wrong inside.
        """
        named = {name.lower(): value for name, value in headers.items()}
        packs = "gzip" in named.get("accept-encoding", "")
        nonce = ""
        try:
            route = self._route(method, path, named)
            request = self._read(named, body)
            nonce = _text(request, "nonce")
            answer = route(request, named, remote)
        except Refused as refusal:
            return self._problem(refusal, nonce)
        except SyncError as fault:
            return self._problem(Refused("failed", str(fault)), nonce)
        raw = _json({**answer, "nonce": nonce})
        kind: Headers = [("Content-Type", self.replica.realm.wire_type)]
        if packs and len(raw) > SMALL:
            raw = gzip.compress(raw, compresslevel=6, mtime=0)
            kind.append(("Content-Encoding", "gzip"))
        return peer.OK, [*kind, ("Cache-Control", "no-store")], raw

    def _route(
        self, method: str, path: str, headers: Mapping[str, str]
    ) -> Callable[[dict[str, Any], Mapping[str, str], str], dict[str, Any]]:
        routes = {
            ROOT + "enrol": self._enrol,
            ROOT + "session": self._session,
            ROOT + "exchange": self._exchange,
        }
        if path not in routes:
            raise Refused("not-found", "There is nothing here. Update the older program.")
        if method != "POST":
            raise Refused("not-post", "Nothing here is read by GET. Send it by POST.")
        kind = headers.get("content-type", "").partition(";")[0].strip().lower()
        if kind != self.replica.realm.wire_type:
            raise Refused("not-ours", f"Send {self.replica.realm.wire_type}.")
        return routes[path]

    def _read(self, headers: Mapping[str, str], body: bytes) -> dict[str, Any]:
        if len(body) > wire.MOST_WIRE_BYTES:
            raise wire.too_large(f"{len(body)} bytes")
        try:
            if headers.get("content-encoding", "") == "gzip":
                body = peer.unpack(body, wire.MOST_WIRE_BYTES)
            request = json.loads(body)
        except OverflowError as fault:
            raise wire.too_large(str(fault)) from fault
        except (ValueError, RecursionError) as fault:
            raise wire.malformed("it is no JSON") from fault
        if not isinstance(request, dict):
            raise wire.malformed("it is no object")
        return request

    def _enrol(
        self, request: dict[str, Any], headers: Mapping[str, str], remote: str
    ) -> dict[str, Any]:
        self._failures.check(remote, self._seconds())
        code, dev, stated = (_text(request, name) for name in ("code", "dev", "public_key"))
        try:
            public, sig = unb64(stated), unb64(_text(request, "sig"))
        except ValueError as fault:
            raise wire.malformed("the key is not base64url") from fault
        proof = enrolment_proof(self.replica.realm, code=code, dev=dev, public_key=stated)
        try:
            if not verify_signature(public, proof, sig):
                raise Refused("not-enrolled", "The device did not sign with the key it enrols.")
            told = self.replica.hooks.enrol(dev, public, code)
        except Refused:
            self._failures.note(remote, self._seconds())
            raise
        return {**told, "now": self.replica.hooks.moment().at}

    def _session(
        self, request: dict[str, Any], headers: Mapping[str, str], remote: str
    ) -> dict[str, Any]:
        dev, key = _text(request, "dev"), _text(request, "key")
        if "challenge" not in request:
            return self._challenge(dev, key)
        challenge = _text(request, "challenge")
        with self._lock:
            asked = self._challenges.pop(challenge, None)
        if asked is None or asked.until < self._seconds() or (asked.dev, asked.key) != (dev, key):
            raise Refused("no-session", "This challenge is over. Ask for a new one.")
        public = self._public_key(dev, key)
        hooks = self.replica.hooks
        proof = session_proof(hooks.realm, central_key=hooks.key.id, challenge=challenge, dev=dev)
        try:
            sig = unb64(_text(request, "sig"))
        except ValueError as fault:
            raise wire.malformed("the signature is not base64url") from fault
        if public is None or not verify_signature(public, proof, sig):
            raise Refused("not-enrolled", "This device is not enrolled here. Enrol it anew.")
        token = secrets.token_urlsafe(TOKEN_BYTES)
        session = _Session(dev, key, self._seconds() + TOKEN_S)
        with self._lock:
            _put(self._tokens, _hidden(token), session, MOST_TOKENS)
        return {"token": token, "seconds": int(TOKEN_S), "now": hooks.moment().at}

    def _challenge(self, dev: str, key: str) -> dict[str, Any]:
        hooks = self.replica.hooks
        challenge = secrets.token_urlsafe(TOKEN_BYTES)
        asked = _Session(dev, key, self._seconds() + CHALLENGE_S)
        with self._lock:
            _put(self._challenges, challenge, asked, MOST_CHALLENGES)
        now = hooks.moment().at
        return {"challenge": challenge, "dev": hooks.dev, "key": hooks.key.id, "now": now}

    def _exchange(
        self, request: dict[str, Any], headers: Mapping[str, str], remote: str
    ) -> dict[str, Any]:
        return central.answer_exchange(self.replica, self._session_of(headers).dev, request)

    def _session_of(self, headers: Mapping[str, str]) -> _Session:
        scheme, _, token = headers.get("authorization", "").partition(" ")
        with self._lock:
            session = self._tokens.get(_hidden(token)) if scheme == "Bearer" else None
        if session is None or session.until < self._seconds():
            raise Refused("no-session", "The session is over. Open a new one; nothing is lost.")
        if self._public_key(session.dev, session.key) is None:
            raise Refused("not-enrolled", "This device is no longer enrolled here. Enrol it anew.")
        return session

    def _public_key(self, dev: str, key: str) -> bytes | None:
        with self.replica.hooks.reading() as db:
            return self.replica.hooks.public_key(db, dev, key)

    def _problem(self, refusal: Refused, nonce: str) -> tuple[int, Headers, bytes]:
        code = CODES.get(refusal.kind, 503 if refusal.kind == "failed" else 422)
        headers = [("Content-Type", peer.PROBLEM_TYPE), ("Cache-Control", "no-store")]
        if refusal.retry_after is not None:
            headers.append(("Retry-After", str(refusal.retry_after)))
        problem = {
            "type": f"urn:{self.replica.realm.name}:problem:{refusal.kind}",
            "title": refusal.kind,
            "status": code,
            "detail": refusal.says,
            "nonce": nonce,
        }
        return code, headers, _json(problem)


class _Failures:
    """Counts failed enrolments by address, so that codes cannot be tried out."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._times: OrderedDict[str, deque[float]] = OrderedDict()

    def check(self, remote: str, now: float) -> None:
        """Refuse an address that failed too often of late."""
        with self._lock:
            times = self._times.get(remote, deque())
            while times and times[0] <= now - FAILURES_S:
                times.popleft()
            if len(times) >= MOST_FAILURES:
                wait = int(times[0] + FAILURES_S - now) + 1
                says = f"Too many codes were wrong. Wait {wait} seconds, then try again."
                raise Refused("too-often", says, wait)

    def note(self, remote: str, now: float) -> None:
        """Count one failure."""
        with self._lock:
            times = self._times.get(remote, deque())
            times.append(now)
            _put(self._times, remote, times, MOST_ADDRESSES)


def _put(kept: OrderedDict[Any, Any], key: object, value: object, most: int) -> None:
    kept[key] = value
    kept.move_to_end(key)
    while len(kept) > most:
        kept.popitem(last=False)


def _hidden(token: str) -> bytes:
    return hashlib.sha256(token.encode("utf-8", "replace")).digest()


def _text(request: Mapping[str, Any], name: str) -> str:
    value = request.get(name)
    if not isinstance(value, str) or len(value) > SMALL:
        raise wire.malformed(f"{name} is no text of at most {SMALL} characters")
    return value


def _json(value: Mapping[str, Any]) -> bytes:
    return json.dumps(value, ensure_ascii=False, separators=(",", ":")).encode("utf-8")
