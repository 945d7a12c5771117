"""Blobs on the wire, the device's side: after the entries, two in flight, small before large."""

import threading
from collections.abc import Callable, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass, field

from sync.blobs import LENGTH, MOST_PIECE_BYTES, OFFSET, ROOT
from sync.errors import NoContact, Refused
from sync.peer import NO_CONTENT, OK, UNAUTHORIZED, Carried, Peer
from sync.replica import Replica

IN_FLIGHT = 2
MOST_DOUBTS = 3  # trouble in a row with one blob, nothing of it arriving in between
CONFLICT, UNPROCESSABLE = 409, 422
Progress = Callable[[int, int], None]
Stop = Callable[[], bool]


class WrongBytes(Refused):
    """Central has all bytes of a blob and they have another hash; it dropped them."""


@dataclass
class Uploaded:
    """What one run sent: names that arrived whole, bytes sent, and what stood in the way."""

    names: list[str] = field(default_factory=list)
    bytes: int = 0
    says: str = ""


class Uploading:
    """Sends what central lacks of this node's blobs, from where central says that it ends."""

    def __init__(
        self,
        replica: Replica,
        to: Peer,
        renew: Callable[[], None],
        *,
        progress: Progress | None = None,
        stop: Stop | None = None,
    ) -> None:
        self._replica, self._to, self._renew = replica, to, renew
        self._progress, self._stop = progress, stop
        self._lock = threading.Lock()
        self._done: dict[str, int] = {}
        self._ended = False
        self.came = Uploaded()

    def run(self, missing: Mapping[str, int], arrived: Callable[[str], None]) -> Uploaded:
        """Send the blobs named with their offsets; those that are not here are passed over.

        ``arrived(name)`` is told of each on the caller's thread. What stands in the way ends
        the run; its sentence is in ``says`` and the next run goes on from there.
        """
        sizes = {name: self._replica.hooks.shelf.size(name) for name in missing}
        here = {name: size for name, size in sizes.items() if size is not None}
        self._done = {name: min(missing[name], size) for name, size in here.items()}
        self._of = sum(here.values())
        queue = sorted(here, key=lambda name: (here[name], name))
        with ThreadPoolExecutor(IN_FLIGHT, thread_name_prefix="blob") as threads:
            going: dict[Future[bool], str] = {}
            while queue or going:
                while queue and len(going) < IN_FLIGHT and not self._over():
                    name = queue.pop(0)
                    going[threads.submit(self._send, name, here[name])] = name
                if not going:
                    break
                for ended in wait(going, return_when=FIRST_COMPLETED).done:
                    self._take(ended, going.pop(ended), arrived)
        return self.came

    def _take(self, ended: Future[bool], name: str, arrived: Callable[[str], None]) -> None:
        try:
            whole = ended.result()
        except (NoContact, Refused, OSError) as fault:
            self.came.says = self.came.says or str(fault)
            # The others would meet the same; a blob that is wrong by itself holds up nobody.
            self._ended = self._ended or not isinstance(fault, Refused)
            return
        if whole:
            arrived(name)
            self.came.names.append(name)

    def _over(self) -> bool:
        return self._ended or (self._stop is not None and self._stop())

    def _send(self, name: str, size: int) -> bool:
        """Send one blob to its end; say whether it arrived whole."""
        doubts, anew, offset = 0, False, self._done[name]
        with self._replica.hooks.shelf.path(name).open("rb") as file:
            while offset < size:
                if self._over():
                    return False
                file.seek(offset)
                before = offset
                try:
                    offset = self._piece(name, offset, size, file.read(MOST_PIECE_BYTES))
                except WrongBytes:
                    if anew or not self._replica.hooks.shelf.sound(name):
                        raise
                    # Another device's bytes were wrong: central dropped them, and these are right.
                    anew, offset = True, 0
                doubts = 0 if offset > before else doubts + 1
                if doubts > MOST_DOUBTS:
                    raise NoContact("a photo does not go on")
                self._moved(name, offset)
        return True

    def _piece(self, name: str, offset: int, size: int, data: bytes) -> int:
        """Send one piece and return where the blob ends at central now."""
        headers = {OFFSET: str(offset), LENGTH: str(size)}
        try:
            answer = self._carry("PATCH", name, headers, data)
        except NoContact:
            return self._asked(name)  # it may have arrived: only now is there a doubt
        with self._lock:
            self.came.bytes += len(data)
        if answer.code in (NO_CONTENT, CONFLICT) and answer.offset is not None:
            return min(answer.offset, size)
        raise self._refused(name, answer)

    def _asked(self, name: str) -> int:
        answer = self._carry("HEAD", name, {}, b"")
        if answer.code == OK and answer.offset is not None:
            return answer.offset
        raise self._refused(name, answer)

    def _refused(self, name: str, answer: Carried) -> Exception:
        says = answer.says or f"Central answered {answer.code} to a photo. Try again later."
        if answer.code == UNPROCESSABLE:
            if not self._replica.hooks.shelf.sound(name):
                says = f"The photo {name[:8]} is damaged on this device: central did not take it."
            return WrongBytes("blob", says)
        if answer.code == UNAUTHORIZED or answer.code >= 500:
            return NoContact(says, answer.retry_after)
        return Refused("blob", says, answer.retry_after)

    def _carry(self, method: str, name: str, headers: Mapping[str, str], data: bytes) -> Carried:
        token = self._replica.token
        answer = self._to.carry(method, ROOT + name, headers, data, token=token)
        if answer.code != UNAUTHORIZED:
            return answer
        with self._lock:
            if self._replica.token == token:  # the other thread has not renewed it meanwhile
                self._renew()
        return self._to.carry(method, ROOT + name, headers, data, token=self._replica.token)

    def _moved(self, name: str, offset: int) -> None:
        with self._lock:
            self._done[name] = offset
            if self._progress is not None:
                self._progress(sum(self._done.values()), self._of)
