"""One run of replication from a device's side, from the session to the last exchange."""

import secrets
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sync import blobs, device, peer
from sync.encoding import b64
from sync.endpoint import ROOT, enrolment_proof, session_proof
from sync.entry import Realm
from sync.errors import NoContact, Refused
from sync.keys import DeviceKey, key_id
from sync.peer import Answer, Peer
from sync.pull import Run
from sync.replica import Moment, Pin, Replica
from sync.upload import Uploaded, Uploading

NONCE_BYTES = 16
MOST_RENEWALS = 2
Progress = Callable[[int, int], None]
Stop = Callable[[], bool]


@dataclass(frozen=True, slots=True)
class SyncReport:
    """What one run did: counts of entries, logs in which central fell back, what was refused.

    ``waiting`` own entries are not acknowledged; ``denied`` scopes are not granted; ``at`` is
    the time here when it ended. ``refused`` holds {log, at, why, says}. Photos count apart:
    entries have arrived though the line broke under a photo; ``photos_say`` is what stopped them.
    """

    pushed: int
    pulled: int
    waiting: int
    regressed: int
    carried: int
    refused: list[dict[str, Any]]
    denied: list[str]
    at: str
    photos_sent: int = 0
    photos_waiting: int = 0
    photos_say: str = ""


def run(
    replica: Replica,
    to: Peer,
    *,
    progress: Progress | None = None,
    stop: Stop | None = None,
    photos: Progress | None = None,
) -> SyncReport:
    """Exchange with central until nothing is left, or nothing moves any more, then send photos.

    Whatever happens, each step taken before stays taken and the next run goes on from there.
    ``progress(done, of)`` counts entries, ``photos(done, of)`` bytes; ``stop()`` is asked
    between exchanges and between pieces of photos.

    Raises:
        NoContact: The line or the answer failed; try again later (``sync.retry``).
        Refused: Central does not know this device.
    """
    state = Run()
    moved = True
    while moved and not (stop is not None and stop()):
        request, answer = _exchange(replica, to, state)
        moved = device.take(replica, state, request, answer) | _note_clock(replica)
        if progress is not None:
            _tell(replica, state, progress)
        if device.done(replica, state):
            break
    came = _send_blobs(replica, to, state, photos, stop)
    with replica.hooks.reading() as db:
        waiting = device.waiting(replica, db)
        unsent = blobs.waiting(db, replica.hooks.own_logs(db))
    return SyncReport(
        state.pushed,
        state.pulled,
        waiting,
        len(state.regressed),
        state.carried,
        state.refused,
        sorted(state.denied),
        replica.hooks.moment().at,
        len(came.names),
        len(unsent),
        came.says,
    )


def _send_blobs(
    replica: Replica, to: Peer, state: Run, progress: Progress | None, stop: Stop | None
) -> Uploaded:
    def arrived(name: str) -> None:
        with replica.hooks.transaction() as db:
            blobs.note(db, [name], [])

    if not state.missing:
        return Uploaded()
    sending = Uploading(
        replica, to, lambda: open_session(replica, to), progress=progress, stop=stop
    )
    return sending.run(state.missing, arrived)


def enrol(to: Peer, realm: Realm, key: DeviceKey, dev: str, code: str) -> dict[str, Any]:
    """Enrol this device with a one-time code and return what central tells of itself.

    Raises:
        NoContact: No answer, or not central's.
        Refused: The code is unknown, used or too old, or too many were tried.
    """
    public = b64(key.public)
    sig = key.sign(enrolment_proof(realm, code=code, dev=dev, public_key=public))
    body = {"code": code, "dev": dev, "public_key": public, "sig": b64(sig)}
    return _must(_call(to, "enrol", body)).body


def open_session(replica: Replica, to: Peer) -> None:
    """Prove this device's key to central, keep the token and what central's clock said.

    No clock of this device takes part, so one that thinks it is 1970 gets in as well.
    """
    hooks, pin = replica.hooks, _pin(replica)
    who = {"dev": hooks.dev, "key": hooks.key.id}
    asked = _must(_call(to, "session", who)).body
    if asked.get("key") != key_id(pin.public_key):
        raise NoContact("another central answered than the one this device is enrolled with")
    challenge = _text(asked, "challenge")
    proof = session_proof(
        replica.realm, central_key=key_id(pin.public_key), challenge=challenge, dev=hooks.dev
    )
    before = hooks.moment()
    signed = {**who, "challenge": challenge, "sig": b64(hooks.key.sign(proof))}
    given = _must(_call(to, "session", signed)).body
    replica.token = _text(given, "token")
    replica.checked = clock_checked(_text(given, "now"), before, hooks.moment())


def clock_checked(central_at: str, before: Moment, after: Moment) -> dict[str, Any]:
    """Return what one reading of central's clock says of this one; ms, where they are known.

    ``offset_ms`` is this clock less central's, give or take half of ``rtt_ms``.
    """
    found: dict[str, Any] = {"central_at": central_at}
    if before.mono is None or after.mono is None or before.boot != after.boot:
        return found
    rtt = max(0, after.mono - before.mono)
    found["rtt_ms"] = rtt
    try:
        apart = datetime.fromisoformat(after.at) - datetime.fromisoformat(central_at)
    except (TypeError, ValueError):  # a clock that states no such time is told as it came
        return found
    found["offset_ms"] = round(apart.total_seconds() * 1000) - rtt // 2
    return found


def _note_clock(replica: Replica) -> bool:
    # Only now that central's heads were taken: appended before, it would make a fork of a
    # log that was merely restored.
    if replica.checked is None:
        return False
    with replica.hooks.transaction() as db:
        replica.hooks.write(db, "clock.checked", replica.checked)
    replica.checked = None
    return True


def _exchange(replica: Replica, to: Peer, state: Run) -> tuple[dict[str, Any], dict[str, Any]]:
    renewals = 0
    while True:
        if not replica.token:
            open_session(replica, to)
        request = device.ask(replica, state)
        answer = _call(to, "exchange", request, token=replica.token)
        if answer.code == peer.UNAUTHORIZED and renewals < MOST_RENEWALS:
            replica.token = ""
            renewals += 1
            continue
        if answer.code == peer.TOO_LARGE and state.most > device.FEWEST_ENTRIES:
            state.most //= 2
            state.most_bytes //= 2
            continue
        return request, _must(answer).body


def _call(to: Peer, name: str, body: Mapping[str, Any], *, token: str = "") -> Answer:
    nonce = b64(secrets.token_bytes(NONCE_BYTES))
    answer = to.send(ROOT + name, {**body, "nonce": nonce}, token=token)
    # Only an answer to this very request may be believed; an error changes nothing here.
    if answer.code == peer.OK and answer.body.get("nonce") != nonce:
        raise NoContact("the answer belongs to another request")
    return answer


def _must(answer: Answer) -> Answer:
    if answer.code == peer.OK:
        return answer
    says = str(answer.body.get("detail") or f"Central answered {answer.code}. Try again later.")
    if answer.code >= 500 or answer.code == peer.UNAUTHORIZED:  # a challenge or session was over
        raise NoContact(says, answer.retry_after)
    raise Refused(str(answer.body.get("title") or answer.code), says, answer.retry_after)


def _pin(replica: Replica) -> Pin:
    pin = replica.hooks.central()
    if pin is None:
        raise Refused("not-enrolled", "This device is enrolled nowhere. Enrol it first.")
    return pin


def _text(body: Mapping[str, Any], name: str) -> str:
    value = body.get(name)
    if not isinstance(value, str):
        raise NoContact(f"the answer names no {name}")
    return value


def _tell(replica: Replica, state: Run, progress: Progress) -> None:
    with replica.hooks.reading() as db:
        left = device.waiting(replica, db)
    done = state.pushed + state.pulled
    progress(done, done + left + (1 if state.more else 0))
