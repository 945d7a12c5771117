"""Blobs on the wire, central's side: taken in pieces at a true offset, whole only by their hash.

The resource is the hash, so there is nothing to create and any device may finish what another
began. Only what an accepted entry names is taken. The request that came last for a blob is the
one that is heard; an older one ends at its next step.
"""

import sqlite3
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from typing import Any, Protocol

from sync.errors import Refused
from sync.replica import Replica
from sync.shelf import Shelf, is_name

ROOT = "/blob/v1/"
MOST_PIECE_BYTES = 128 * 1024
MOST_BLOB_BYTES = 16 * 1024 * 1024
MOST_NAMED = 1000  # in one answer; the next one names the rest
STEP_BYTES = 32 * 1024
PIECE_S = 120.0  # for the body of one piece; a silence of 15 s ends it earlier, by the server
SILENCE_S = 15.0
FULL_RETRY_S = 300
OFFSET, LENGTH, NONCE = "Upload-Offset", "Upload-Length", "Sync-Nonce"


class Readable(Protocol):
    """A body that is read as it arrives."""

    def read(self, size: int, /) -> bytes:
        """Return at most so many bytes; none when the body or the line has ended."""


class OffsetDiffers(Refused):
    """The piece does not begin where the blob ends here; ``offset`` says where it does."""

    def __init__(self, offset: int) -> None:
        self.offset = offset
        super().__init__("offset", f"{offset} bytes are here. Go on from there.")


class Door:
    """Takes blobs for one central. Nothing of an upload is remembered but its bytes."""

    def __init__(self, replica: Replica, *, seconds: Callable[[], float] = time.monotonic) -> None:
        self._replica = replica
        self._seconds = seconds
        self._lock = threading.Lock()
        self._newest: dict[str, object] = {}

    def answer(
        self, method: str, name: str, headers: Mapping[str, str], body: Readable
    ) -> tuple[int, int]:
        """Answer HEAD or PATCH with a code of HTTP and the offset that holds now.

        Raises:
            Refused: Nobody names this blob, the piece is none, or its bytes are wrong.
            OffsetDiffers: It does not begin at the true offset.
        """
        sizes = self._sizes(name)
        if method == "HEAD":
            return 200, self._shelf.offset(name, max(sizes))
        if method != "PATCH":
            raise Refused("not-post", "Send a piece by PATCH, or ask by HEAD.")
        length = _number(headers, LENGTH)
        if length not in sizes:
            raise Refused("wrong-bytes", "The entry that names it states another length.")
        return 204, self._take(name, length, headers, body)

    @property
    def _shelf(self) -> Shelf:
        return self._replica.hooks.shelf

    def _sizes(self, name: str) -> set[int]:
        with self._replica.hooks.reading() as db:
            rows = db.execute("SELECT n FROM blob WHERE h = ?", (name,)).fetchall()
        sizes = {int(n) for (n,) in rows if n <= MOST_BLOB_BYTES}
        if not is_name(name) or not sizes:
            raise Refused("not-found", "No entry here names it. Send the entry first.")
        return sizes

    def _take(self, name: str, length: int, headers: Mapping[str, str], body: Readable) -> int:
        stated, left = _number(headers, OFFSET), _number(headers, "Content-Length")
        if left > MOST_PIECE_BYTES:
            raise Refused("too-large", f"Send at most {MOST_PIECE_BYTES} bytes at a time.")
        ticket, until = object(), self._seconds() + PIECE_S
        with self._lock:
            self._newest[name] = ticket
            offset = self._shelf.offset(name, length)
            if stated != offset:
                raise OffsetDiffers(offset)
        while left and (data := body.read(min(STEP_BYTES, left))):
            left -= len(data)
            offset = self._add(name, length, offset, data, ticket)
            if self._seconds() > until:
                break  # what came is kept; the rest is sent again
        return offset

    def _add(self, name: str, length: int, offset: int, data: bytes, ticket: object) -> int:
        """Add bytes while this request is the newest one; at full length look at the hash."""
        with self._lock:
            if self._newest.get(name) is not ticket:
                raise OffsetDiffers(self._shelf.offset(name, length))
            if offset + len(data) > length:
                raise Refused("wrong-bytes", "More bytes came than were stated.")
            try:
                self._shelf.grow(name, data)
                if offset + len(data) == length and not self._shelf.finish(name):
                    raise Refused("wrong-bytes", "The bytes have another hash. Send them anew.")
            except OSError as fault:
                says = "Central has no room for it now. It stays on the device; try later."
                raise Refused("failed", says, FULL_RETRY_S) from fault
        return offset + len(data)


def missing(db: sqlite3.Connection, shelf: Shelf, logs: Iterable[str]) -> list[dict[str, Any]]:
    """Return what entries of these logs name and what is not whole here, each with its offset."""
    found: dict[str, dict[str, Any]] = {}
    for log in logs:
        for name, size in db.execute("SELECT h, n FROM blob WHERE log = ? ORDER BY seq", (log,)):
            if len(found) >= MOST_NAMED:
                return list(found.values())
            if name not in found and size <= MOST_BLOB_BYTES and not shelf.has(name):
                found[name] = {"h": name, "have": shelf.offset(name, size)}
    return list(found.values())


def held(db: sqlite3.Connection, shelf: Shelf, names: Iterable[str]) -> list[str]:
    """Return those of the names that are whole here and named by an entry here."""
    return [
        name
        for name in names
        if shelf.has(name)
        and db.execute("SELECT 1 FROM blob WHERE h = ? LIMIT 1", (name,)).fetchone()
    ]


def waiting(db: sqlite3.Connection, logs: Iterable[str]) -> dict[str, int]:
    """Return by name the bytes of own blobs that central did not say it holds."""
    found: dict[str, int] = {}
    for log in logs:
        found.update(
            db.execute(
                "SELECT h, n FROM blob WHERE log = ? AND n <= ? "
                "AND h NOT IN (SELECT h FROM blob_received)",
                (log, MOST_BLOB_BYTES),
            ).fetchall()
        )
    return found


def note(db: sqlite3.Connection, received: Iterable[str], missing: Iterable[str]) -> None:
    """Keep what central said last: these it holds, those it does not, whatever it said before."""
    db.executemany("DELETE FROM blob_received WHERE h = ?", [(name,) for name in missing])
    db.executemany(
        "INSERT INTO blob_received VALUES (?) ON CONFLICT DO NOTHING",
        [(name,) for name in received],
    )


def _number(headers: Mapping[str, str], name: str) -> int:
    text = headers.get(name.lower(), "")
    if not (text.isascii() and text.isdigit() and len(text) < 16):
        raise Refused("malformed", f"The request states no {name}. Update the older program.")
    return int(text)
