"""A row as bytes: the same on SQLite and PostgreSQL, so that a move between them breaks no seal.

Columns stand by name and those without a value are left out: a column that is added later, empty
in old rows, leaves their bytes as they are.
"""

import hashlib
import hmac
import json
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from typing import Any
from uuid import UUID

from django.db import connection, models

from labplan.base.seal.registry import Book

FETCHED_AT_ONCE = 2000
Row = tuple[Any, ...]
_encode = json.JSONEncoder(separators=(",", ":"), default=repr).encode


class RowReader:
    """Reads the rows of one book in their order and makes the code of each."""

    def __init__(self, book: Book, key: bytes) -> None:
        meta = book.model._meta
        fields = sorted(meta.concrete_fields, key=lambda field: field.column)
        self.columns = [field.column for field in fields]
        self._table = meta.db_table
        self._key = key
        self._prefix = f'["row",{json.dumps(book.name)},'
        self._forms = [
            (index, form)
            for index, field in enumerate(fields)
            if (form := _form_of(field)) is not None
        ]
        self._number = meta.get_field(book.number).column
        self._subject = meta.get_field(book.subject).column if book.subject else None
        self.number_at = self.columns.index(self._number)
        self.subject_at = self.columns.index(self._subject) if self._subject else None

    def code_of(self, row: Row) -> bytes:
        """HMAC of the row under the key."""
        values = list(row)
        for index, form in self._forms:
            if values[index] is not None:
                values[index] = form(values[index])
        named = {n: v for n, v in zip(self.columns, values, strict=True) if v is not None}
        return hmac.digest(self._key, f"{self._prefix}{_encode(named)}]".encode(), "sha256")

    def all_rows(self) -> Iterator[Row]:
        """Every row, by subject and number; only a few are in memory at once."""
        order = ", ".join(f'"{name}"' for name in (self._subject, self._number) if name)
        return self._stream(f"ORDER BY {order}", [])

    def rows_after(self, subject: int, number: int, limit: int) -> Iterator[Row]:
        """Rows of one subject with greater numbers, in their order."""
        return self._between(subject, f'"{self._number}" > %s', [number], limit)

    def rows_within(self, subject: int, first: int, last: int) -> Iterator[Row]:
        condition = f'"{self._number}" BETWEEN %s AND %s'
        return self._between(subject, condition, [first, last], last - first + 1)

    def _between(
        self, subject: int, condition: str, parameters: list[int], limit: int
    ) -> Iterator[Row]:
        if self._subject:
            condition, parameters = (
                f'"{self._subject}" = %s AND {condition}',
                [subject, *parameters],
            )
        return self._stream(
            f'WHERE {condition} ORDER BY "{self._number}" LIMIT %s', [*parameters, limit]
        )

    def _stream(self, tail: str, parameters: list[int]) -> Iterator[Row]:
        # The sign keeps Python from reading a date or a flag out of the column's declared type:
        # what somebody wrote there may be neither.
        sign = "+" if connection.vendor == "sqlite" else ""
        shown = ", ".join(f'{sign}"{name}"' for name in self.columns)
        with connection.chunked_cursor() as cursor:
            cursor.execute(f'SELECT {shown} FROM "{self._table}" {tail}', parameters)
            while rows := cursor.fetchmany(FETCHED_AT_ONCE):
                yield from rows


def _form_of(field: models.Field) -> Callable[[Any], Any] | None:
    """How a value of this field is written; None where both databases give the same."""
    if isinstance(field, models.ForeignKey):
        return _form_of(field.target_field)
    if isinstance(field, models.DecimalField):
        return _decimal_form(field.decimal_places)
    for kind, form in _FORMS:
        if isinstance(field, kind):
            return form
    raise TypeError(f"{field} has no settled form yet; say in rows.py how it is written")


def _decimal_form(places: int) -> Callable[[Any], str]:
    def form(value: Any) -> str:
        try:
            return f"{value:.{places}f}"
        except ValueError:  # text where a number belongs: somebody wrote it past the models
            return repr(value)

    return form


def _instant_text(value: Any) -> str:
    if isinstance(value, datetime):
        return str(value.astimezone(UTC).replace(tzinfo=None))
    return str(value)


def _uuid_text(value: Any) -> str:
    return value.hex if isinstance(value, UUID) else str(value)


def _bytes_text(value: Any) -> str:
    return hashlib.sha256(bytes(value)).hexdigest() if not isinstance(value, str) else repr(value)


def _flag(value: Any) -> Any:
    return int(value) if isinstance(value, bool) else value


_FORMS: tuple[tuple[type[models.Field], Callable[[Any], Any] | None], ...] = (
    (models.DateTimeField, _instant_text),
    (models.DateField, str),
    (models.UUIDField, _uuid_text),
    (models.BinaryField, _bytes_text),
    (models.BooleanField, _flag),
    (models.CharField, None),
    (models.TextField, None),
    (models.IntegerField, None),
)
