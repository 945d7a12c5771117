"""Central over HTTP: a connection a thread, kept alive; TLS always verified, nothing believed."""

import ipaddress
import threading
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import requests

from sync import wire
from sync.blobs import NONCE
from sync.entry import Realm
from sync.errors import NoContact, Unsuitable
from sync.peer import Answer, Carried, carried, decode, encode, piece_headers

CONNECT_S = 10.0
SILENCE_S = 60.0  # between two bytes
WHOLE_S = 300.0  # for one answer
STEP_BYTES = 64 * 1024
MOST_BYTES = wire.MOST_WIRE_BYTES * 2


class HttpPeer:
    """Central at an address. Plain http is for this machine alone.

    ``authorities`` names a file of certificates (PEM) to trust instead of the usual ones, for a
    central whose certificate its own office issued.
    """

    def __init__(self, url: str, realm: Realm, *, authorities: Path | None = None) -> None:
        self.url, self.realm = check_address(url), realm
        self._authorities = authorities
        self._mine = threading.local()
        self._lock = threading.Lock()
        self._open: list[requests.Session] = []

    @property
    def _session(self) -> requests.Session:
        """Return this thread's own connection: requests promises nothing of a shared one."""
        session: requests.Session | None = getattr(self._mine, "session", None)
        if session is None:
            session = requests.Session()
            # Nothing of the surroundings may switch verification off or add credentials.
            session.trust_env = False
            if self._authorities is not None:
                session.verify = str(self._authorities)
            self._mine.session = session
            with self._lock:
                self._open.append(session)
        return session

    def send(self, path: str, body: Mapping[str, Any], *, token: str = "") -> Answer:
        """Return central's answer to one request.

        Raises:
            NoContact: No line, no trust, or an answer that is not central's.
        """
        headers, raw = encode(self.realm, body, token)
        try:
            with self._session.post(
                self.url + path,
                data=raw,
                headers=headers,
                timeout=(CONNECT_S, SILENCE_S),
                allow_redirects=False,
                stream=True,
            ) as response:
                named = {name.lower(): value for name, value in response.headers.items()}
                return decode(self.realm, response.status_code, named, _read(response))
        except requests.exceptions.SSLError as fault:
            raise NoContact("its certificate cannot be trusted") from fault
        except requests.exceptions.RequestException as fault:
            raise NoContact("the line failed") from fault

    def carry(
        self, method: str, path: str, headers: Mapping[str, str], data: bytes, *, token: str = ""
    ) -> Carried:
        """Return central's answer to one piece of a blob.

        Raises:
            NoContact: No line, no trust, or an answer that is not central's.
        """
        sent = piece_headers(headers, data, token)
        try:
            with self._session.request(
                method,
                self.url + path,
                data=data,
                headers=sent,
                timeout=(CONNECT_S, SILENCE_S),
                allow_redirects=False,
                stream=True,
            ) as response:
                named = {name.lower(): value for name, value in response.headers.items()}
                return carried(response.status_code, named, _read(response), sent[NONCE])
        except requests.exceptions.SSLError as fault:
            raise NoContact("its certificate cannot be trusted") from fault
        except requests.exceptions.RequestException as fault:
            raise NoContact("the line failed") from fault

    def close(self) -> None:
        """Let the connections go."""
        with self._lock:
            for session in self._open:
                session.close()
            self._open.clear()
        self._mine = threading.local()


def check_address(url: str) -> str:
    """Return an address without its last slash if it may be used for the record.

    Raises:
        Unsuitable: Not https, unless it is this machine.
    """
    try:
        parts = urlsplit(url)
        host, port = parts.hostname or "", parts.port
    except ValueError as fault:
        raise Unsuitable(f"{url!r} is no address. Give one like https://host:port.") from fault
    plain = parts.scheme == "http" and _is_loopback(host)
    if not host or port == 0 or (parts.scheme != "https" and not plain):
        raise Unsuitable(
            f"The record goes to {url!r} only over https; plain http is for this machine alone. "
            "Give an address that begins with https://."
        )
    if parts.query or parts.fragment or parts.username:
        raise Unsuitable(f"Give the address alone, without what stands around it: {host}.")
    return url.rstrip("/")


def _is_loopback(host: str) -> bool:
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def _read(response: requests.Response) -> bytes:
    began, parts, size = time.monotonic(), [], 0
    for part in response.iter_content(STEP_BYTES):
        parts.append(part)
        size += len(part)
        if size > MOST_BYTES:
            raise NoContact("the answer is larger than any of ours")
        if time.monotonic() - began > WHOLE_S:
            raise NoContact("the line is too slow for the whole answer")
    return b"".join(parts)
