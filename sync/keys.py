"""Device keys: Ed25519 pairs, one a device, kept in a file that only its owner may read."""

import contextlib
import hashlib
import os
from pathlib import Path
from typing import Self

from cryptography.exceptions import InvalidSignature, UnsupportedAlgorithm
from cryptography.hazmat.primitives import serialization
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey, Ed25519PublicKey

from sync.encoding import b64
from sync.errors import KeyUnreadable

SEED_BYTES = 32
KEY_ID_BYTES = 8


def key_id(public: bytes) -> str:
    """Return the short name of a public key: base64url of 8 bytes of its SHA-256."""
    return b64(hashlib.sha256(public).digest()[:KEY_ID_BYTES])


def verify_signature(public: bytes, message: bytes, sig: bytes) -> bool:
    """Say whether ``sig`` is the Ed25519 signature (RFC 8032) of ``message`` under ``public``."""
    try:
        Ed25519PublicKey.from_public_bytes(public).verify(sig, message)
    except (InvalidSignature, ValueError):
        return False
    return True


class DeviceKey:
    """The private half of a device's identity; it signs and never leaves the device."""

    def __init__(self, private: Ed25519PrivateKey) -> None:
        self._private = private
        self.public: bytes = private.public_key().public_bytes_raw()
        self.id: str = key_id(self.public)

    @classmethod
    def generate(cls) -> Self:
        """Make a new key from the system's random source."""
        return cls(Ed25519PrivateKey.generate())

    @classmethod
    def from_seed(cls, seed: bytes) -> Self:
        """Make the key that belongs to 32 seed bytes (RFC 8032 calls them the private key)."""
        if len(seed) != SEED_BYTES:
            raise KeyUnreadable(f"A key seed has {SEED_BYTES} bytes, this one {len(seed)}.")
        return cls(Ed25519PrivateKey.from_private_bytes(seed))

    @classmethod
    def load(cls, path: Path) -> Self:
        """Read a key from a PKCS#8 PEM file.

        Raises:
            KeyUnreadable: No such file, damaged, or not an Ed25519 key.
        """
        try:
            private = serialization.load_pem_private_key(path.read_bytes(), password=None)
        except (OSError, ValueError, TypeError, UnsupportedAlgorithm) as fault:
            raise KeyUnreadable(
                f"The key file {path.name} cannot be read. "
                "Without it this device cannot sign: enrol it anew under a new name."
            ) from fault
        if not isinstance(private, Ed25519PrivateKey):
            raise KeyUnreadable(f"The key in {path.name} is not an Ed25519 key. Enrol anew.")
        return cls(private)

    def save(self, path: Path) -> None:
        """Write the key as PKCS#8 PEM to a new file of mode 0600, safe on disk on return.

        Raises:
            KeyUnreadable: The file exists already; a key is never overwritten.
        """
        pem = self._private.private_bytes(
            serialization.Encoding.PEM,
            serialization.PrivateFormat.PKCS8,
            serialization.NoEncryption(),
        )
        try:
            number = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
        except FileExistsError as fault:
            raise KeyUnreadable(
                f"There is a key in {path.name} already and it is never overwritten. "
                "Use another folder."
            ) from fault
        with os.fdopen(number, "wb") as file:
            file.write(pem)
            file.flush()
            os.fsync(file.fileno())
        _fsync_folder(path.parent)

    def sign(self, message: bytes) -> bytes:
        """Return the 64-byte signature of ``message``."""
        return self._private.sign(message)


def _fsync_folder(folder: Path) -> None:
    # Folders cannot be opened on Windows, where a new name is durable with its file.
    with contextlib.suppress(PermissionError):
        number = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(number)
        finally:
            os.close(number)
