"""Read the packaged tables of fixtures/: read-only, hashed, with a version made from them."""

import hashlib
import json
from functools import cache
from pathlib import Path
from typing import Any

FOLDER = Path(__file__).resolve().parent.parent / "fixtures"
# what a plan can depend on; their bytes make the data version
PLANNING_TABLES = (
    "classifications",
    "methods",
    "sources",
    "statements",
    "substances",
    "sugars",
    "survival",
)


@cache
def table(name: str) -> dict[str, Any]:
    """Return one packaged table, read once a process. Never change what it returns."""
    loaded: dict[str, Any] = json.loads(_bytes(name))
    return loaded


@cache
def data_version() -> str:
    """Twelve hex digits over all tables that a plan can depend on, as this process read them."""
    return version_on_disk()


def version_on_disk() -> str:
    """The same as the files are now: another one when they were replaced meanwhile."""
    digest = hashlib.sha256()
    for name in PLANNING_TABLES:
        digest.update(hashlib.sha256(_bytes(name)).digest())
    return digest.hexdigest()[:12]


def row_hash(row: dict[str, Any]) -> str:
    """SHA-256 of one row, for the document that used it."""
    text = json.dumps(row, sort_keys=True, ensure_ascii=False, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def _bytes(name: str) -> bytes:
    return (FOLDER / f"{name}.json").read_bytes()
