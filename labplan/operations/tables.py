"""All tables of labplan, found by introspection: in which order, by which rows, with which digest.

A table that is added later is found here too.
"""

import hashlib
import json
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from decimal import Decimal
from graphlib import TopologicalSorter
from typing import Any
from uuid import UUID

from django.db import models

from labplan.operations.state import stored_models

# a row may hold a document of 100 kB
CHUNK = 200
# A book is written in its order, or its trigger refuses; all else goes by its key.
ROW_ORDER = {"inventory.Movement": ("bottle_id", "seq")}
Row = tuple[Any, ...]


@dataclass(frozen=True)
class Table:
    """A model's table and the columns that are copied."""

    model: type[models.Model]

    @property
    def name(self) -> str:
        return self.model._meta.db_table

    @property
    def fields(self) -> list[Any]:
        return [field for field in self.model._meta.local_concrete_fields if not field.generated]

    def count(self, alias: str) -> int:
        return self._all(alias).count()

    def rows(self, alias: str) -> Iterator[Row]:
        """Every row as Python values, streamed."""
        order = ROW_ORDER.get(self.model._meta.label, ("pk",))
        names = [field.attname for field in self.fields]
        return self._all(alias).order_by(*order).values_list(*names).iterator(chunk_size=CHUNK)

    def _all(self, alias: str) -> models.QuerySet[Any]:
        return models.QuerySet(self.model, using=alias)


def tables_in_order() -> list[Table]:
    """Every table, after those that its rows must point to.

    A foreign key that may be NULL is left out, for two tables may point to each other by such a
    one; the target checks foreign keys at the end only.
    """
    found = sorted(stored_models(), key=lambda model: model._meta.label)
    known = set(found)
    needs = {model: sorted(_must_point_to(model) & known, key=str) for model in found}
    return [Table(model) for model in TopologicalSorter(needs).static_order()]


def _must_point_to(model: type[models.Model]) -> set[type[models.Model]]:
    return {
        field.related_model
        for field in model._meta.local_concrete_fields
        if field.is_relation and not field.null and field.related_model is not model
    }


@dataclass
class Digest:
    """How many rows there were and what was in them, whatever their order.

    The sum of the rows' hashes: databases sort text in different ways.
    """

    rows: int = 0
    total: int = 0

    def add(self, row: Row) -> None:
        hashed = hashlib.sha256(b"".join(map(value_bytes, row))).digest()
        self.total = (self.total + int.from_bytes(hashed)) % 2**256
        self.rows += 1

    @property
    def hex(self) -> str:
        return f"{self.total:064x}"


def digest_of(table: Table, alias: str) -> Digest:
    digest = Digest()
    for row in table.rows(alias):
        digest.add(row)
    return digest


def value_bytes(value: Any) -> bytes:
    """The value with its type and length, so that no two values or rows look the same.

    Raises TypeError for a type that nobody has thought of.
    """
    kind, data = _plain(value)
    return f"{kind}{len(data)}:".encode() + data


def _plain(value: Any) -> tuple[str, bytes]:
    match value:
        case None:
            return "null", b""
        case bool() | int():
            return type(value).__name__, str(value).encode()
        case Decimal():
            return "decimal", f"{value:f}".encode()
        case float():
            return "float", value.hex().encode()
        case str():
            return "text", value.encode()
        case bytes() | bytearray() | memoryview():
            return "bytes", bytes(value)
        case datetime():
            return "instant", value.astimezone(UTC).isoformat().encode()
        case date() | time() | timedelta() | UUID():
            return type(value).__name__, str(value).encode()
        case dict() | list():
            return "json", json.dumps(value, sort_keys=True, ensure_ascii=False).encode()
    raise TypeError(f"{type(value).__name__} cannot be compared between databases yet")
