"""Digests over canonical JSON (RFC 8785), which any other program can rebuild."""

import hashlib
from typing import Any

import rfc8785


def sha256_of(value: Any) -> str:
    """Hexadecimal SHA-256 of the canonical form of plain JSON data. Refuses NaN and infinities."""
    return hashlib.sha256(rfc8785.dumps(value)).hexdigest()
