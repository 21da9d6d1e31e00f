"""Insert rows in plain SQL: what every hold writes, without an object for each row.

The text of a statement depends on the number of rows only, and is made once.
"""

from collections.abc import Callable, Sequence
from functools import lru_cache
from typing import Any

from django.db import connection, models

# SQLite takes 32,766 parameters a statement; the widest row here has 21.
CHUNK = 500


def insert_rows(
    model: type[models.Model], names: tuple[str, ...], rows: Sequence[Sequence[Any]]
) -> list[int]:
    """Insert one row for each sequence of values and return their keys, in the same order.

    Every field without a value of its own in the database must be named: defaults of the model are
    not looked at. Constraints and triggers are the database's, as always.
    """
    keys: list[int] = []
    prepare = _preparers(model, names)
    with connection.cursor() as cursor:
        for start in range(0, len(rows), CHUNK):
            chunk = rows[start : start + CHUNK]
            cursor.execute(
                _statement(model, names, len(chunk)),
                [make(value) if make else value
                 for row in chunk for make, value in zip(prepare, row, strict=True)],
            )  # fmt: skip
            keys += [key for (key,) in cursor.fetchall()]
    return keys


@lru_cache(maxsize=256)
def _statement(model: type[models.Model], names: tuple[str, ...], count: int) -> str:
    quote = connection.ops.quote_name
    columns = ", ".join(quote(model._meta.get_field(name).column) for name in names)
    marks = f"({', '.join(['%s'] * len(names))})"
    return (
        f"INSERT INTO {quote(model._meta.db_table)} ({columns}) "
        f"VALUES {', '.join([marks] * count)} RETURNING id"
    )


@lru_cache(maxsize=64)
def _preparers(
    model: type[models.Model], names: tuple[str, ...]
) -> tuple[Callable[[Any], Any] | None, ...]:
    """How a value of each field is given to this database; None where it goes as it is."""
    plain = (models.IntegerField, models.CharField, models.TextField, models.BooleanField)
    found: list[Callable[[Any], Any] | None] = []
    for name in names:
        field = model._meta.get_field(name)
        target = field.target_field if isinstance(field, models.ForeignKey) else field
        found.append(None if isinstance(target, plain) else _preparer(field))
    return tuple(found)


def _preparer(field: Any) -> Callable[[Any], Any]:
    return lambda value: None if value is None else field.get_db_prep_save(value, connection)
