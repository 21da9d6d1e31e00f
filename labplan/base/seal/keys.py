"""Codes that nobody can make without the key. The key is never in the database."""

import hmac
import json
from typing import Any

from django.conf import settings


def seal_key() -> bytes:
    """The installation's key, from LABPLAN_SEAL_KEY or the file seal-key."""
    return hmac.digest(str(settings.SEAL_KEY).encode(), b"labplan seal", "sha256")


def print_of(key: bytes) -> str:
    """A short name of the key, from which the key cannot be told."""
    return hmac.digest(key, b"print", "sha256").hex()[:16]


_encode = json.JSONEncoder(separators=(",", ":")).encode


def framed(*parts: Any) -> bytes:
    """Values as bytes of which each value begins and ends in one place only."""
    return _encode(parts).encode()
