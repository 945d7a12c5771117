"""Central over HTTP: one kept-alive connection, TLS always verified, nothing believed unproved."""

import ipaddress
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import requests

from sync import wire
from sync.entry import Realm
from sync.errors import NoContact, Unsuitable
from sync.peer import Answer, decode, encode

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
        self._session = requests.Session()
        # Nothing of the surroundings may switch verification off or add credentials.
        self._session.trust_env = False
        if authorities is not None:
            self._session.verify = str(authorities)

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

    def close(self) -> None:
        """Let the connection go."""
        self._session.close()


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
