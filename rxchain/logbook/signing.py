"""Signs the head of a logbook's chain, so that who has the public key can tell that nothing before it was changed.

Ed25519 (RFC 8032). The private key is kept outside the logbook: who can change the log should not be able to sign it.
"""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import Any

from rxchain.errors import RequestError
from rxchain.logbook.store import DATABASE, read_entries
from rxchain.logbook.verify import verify

_MISSING = "signing needs the library cryptography: pip install cryptography"


def make_key(path: Path) -> Path:
    """Makes a private key at ``path``, readable by its owner alone, and the public one beside it; returns the latter.

    Raises :class:`RequestError` where there is a file already.
    """
    serialization, keys = _library()
    key = keys.Ed25519PrivateKey.generate()
    private = key.private_bytes(
        serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
    )
    public = key.public_key().public_bytes(serialization.Encoding.PEM, serialization.PublicFormat.SubjectPublicKeyInfo)
    public_path = path.with_name(path.name + ".pub")
    for one, data, mode in ((path, private, 0o600), (public_path, public, 0o644)):
        try:
            file = os.open(one, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, mode)
        except OSError as error:
            raise RequestError(f"{one}: cannot be made: {error.strerror}; give another name") from error
        with os.fdopen(file, "wb") as output:
            output.write(data)
    return public_path


def sign_head(folder: Path, key_path: Path, time: str) -> dict[str, Any]:
    """The signed head of a logbook that verifies; raises :class:`RequestError` where it does not."""
    if key_path.resolve().is_relative_to(folder.resolve()):
        raise RequestError(f"key={key_path}: a key must not lie in the logbook it signs; keep it elsewhere")
    serialization, keys = _library()
    verdict = verify(folder)
    if not verdict.is_good:
        raise RequestError(f"{folder}: not signed, because it does not verify: {verdict.faults[0]}")
    try:
        key = serialization.load_pem_private_key(key_path.read_bytes(), None)
    except (OSError, ValueError, TypeError) as error:
        raise RequestError(f"key={key_path}: not a readable private key: {error}") from error
    if not isinstance(key, keys.Ed25519PrivateKey):
        raise RequestError(f"key={key_path}: must be an Ed25519 key; rxchain log keygen makes one")
    head = {"entries": verdict.entries, "digest": verdict.head, "time": time}
    return {**head, "signature": key.sign(_message(head)).hex()}


def check_head(folder: Path, signed_path: Path, public_path: Path) -> str:
    """What a signed head says about a logbook: empty where it agrees, else what is wrong."""
    serialization, keys = _library()
    from cryptography.exceptions import InvalidSignature

    try:
        signed = json.loads(signed_path.read_text(encoding="utf-8"))
        key = serialization.load_pem_public_key(public_path.read_bytes())
        signature, entries = bytes.fromhex(signed["signature"]), int(signed["entries"])
    except (OSError, ValueError, TypeError, KeyError) as error:
        raise RequestError(f"{signed_path}, {public_path}: not a signed head and its public key: {error}") from error
    if not isinstance(key, keys.Ed25519PublicKey):
        raise RequestError(f"{public_path}: must be an Ed25519 public key")
    try:
        key.verify(signature, _message(signed))
    except InvalidSignature:
        return f"{signed_path.name}: not signed with the key of {public_path.name}, or changed since"
    for entry in read_entries(folder):
        if entry.number == entries:
            return "" if entry.digest == signed["digest"] else f"entry {entries}: not the one that was signed"
    return f"entry {entries}: signed, but no longer in {DATABASE}"


def _message(head: dict[str, Any]) -> bytes:
    return f"rxchain logbook head\n{head['entries']}\n{head['digest']}\n{head['time']}".encode()


def _library() -> tuple[Any, Any]:
    try:
        from cryptography.hazmat.primitives import serialization
        from cryptography.hazmat.primitives.asymmetric import ed25519
    except ImportError as error:
        raise RequestError(_MISSING) from error
    return serialization, ed25519
