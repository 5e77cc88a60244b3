"""How entries hang together: each one's digest takes in the digest before it."""

from __future__ import annotations

import hashlib
import json
import math
from pathlib import Path
from typing import Any

FIRST = "0" * 64  # what the first entry's digest takes in


def canonical(body: dict[str, Any]) -> str:
    """The one way to write a body: sorted keys, no spaces, no figures that are no numbers.

    >>> canonical({"b": 1.5, "a": float("nan")})
    '{"a":null,"b":1.5}'
    """
    return json.dumps(_finite(body), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def digest(before: str, number: int, kind: str, body: str) -> str:
    """SHA-256, hexadecimal, of an entry and all that went before it."""
    return hashlib.sha256(f"{before}\n{number}\n{kind}\n{body}".encode()).hexdigest()


def file_digest(path: Path) -> str:
    """SHA-256 of a file's bytes, hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _finite(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(one) for one in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
