"""One byte form for what is hashed: RFC 8785, decimals as strings."""

import hashlib
from decimal import Decimal
from typing import Any

import rfc8785


def canonical_bytes(value: Any) -> bytes:
    """Return the RFC 8785 form of `value`; Decimals become plain strings, floats are refused.

    A float would print as its shortest form and hide how many digits were meant.
    """
    return rfc8785.dumps(_plain(value))


def sha256_hex(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def _plain(value: Any) -> Any:
    if isinstance(value, Decimal):
        if not value.is_finite():
            raise ValueError(f"{value} has no place in a canonical document")
        return f"{value:f}"
    if isinstance(value, float):
        raise TypeError("floats have no place in a canonical document; round to a Decimal")
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return value
