"""Read many tables as they are at one moment, while others go on writing."""

from collections.abc import Iterator
from contextlib import contextmanager

from django.db import connection, transaction


@contextmanager
def steady_view() -> Iterator[None]:
    """Every read in the block sees the database as it was at the first; nobody waits for it.

    Inside an open transaction it changes nothing: the caller's own view holds then.
    """
    if connection.in_atomic_block:
        yield
    elif connection.vendor == "postgresql":
        with transaction.atomic(durable=True):
            with connection.cursor() as cursor:
                cursor.execute("SET TRANSACTION ISOLATION LEVEL REPEATABLE READ, READ ONLY")
            yield
    else:
        with _reading_only():
            yield


@contextmanager
def _reading_only() -> Iterator[None]:
    """SQLite keeps a reader's view by itself, if BEGIN does not ask for the writer's place."""
    connection.ensure_connection()  # which reads the mode from the settings
    before, connection.transaction_mode = connection.transaction_mode, None
    try:
        with transaction.atomic(durable=True):
            yield
    finally:
        connection.transaction_mode = before
