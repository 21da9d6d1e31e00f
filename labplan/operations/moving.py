"""Move a laptop's SQLite database to an empty PostgreSQL database, whole or not at all.

The source is held still by one IMMEDIATE transaction from the first look to the last word, the
target gets its rows in one transaction of its own. Both sides are read back and compared before
that is committed.
"""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from typing import Any

from django.db import DatabaseError, OperationalError, connection, connections, transaction
from django.db.backends.base.base import BaseDatabaseWrapper

from labplan.base import outbox
from labplan.operations.elsewhere import open_database, standing_in
from labplan.operations.errors import OperationRefused
from labplan.operations.postgres_programs import address_of
from labplan.operations.state import (
    Counts,
    Health,
    check_health,
    foreign_tables,
    has_tables_to_make,
    make_tables,
    require_known_migrations,
    tables_with_rows,
)
from labplan.operations.tables import Digest, Row, Table, digest_of, tables_in_order

SOURCE, TARGET = "default", "target"
Progress = Callable[[str, int, int], None]  # what is done, rows done, rows in all
REPORT_EVERY = 500
# rows at a time; the server looks at the table anew after each batch
FIRST_BATCH, GROWTH, LARGEST_BATCH = 1_000, 8, 100_000


@dataclass(frozen=True)
class MovedTable:
    """A table that holds the same on both sides."""

    name: str
    rows: int
    digest: str


@dataclass(frozen=True)
class Moved:
    """What was moved, and where it is now."""

    tables: tuple[MovedTable, ...]
    counts: Counts
    address: str  # without the password
    is_paused: bool  # because the source was


def move_up(url: str, *, progress: Progress) -> Moved:
    """Copy everything from the default database (SQLite) to the PostgreSQL database at `url`.

    Both sides have the same rows, clean books and matching documents then, and the source's
    outbox is paused. Raises OperationRefused; the target holds no rows then and the source is as
    it was. A repeat after a success is refused, since the target is not empty any more.
    """
    _require_from_sqlite_to_postgresql(url)
    with _target_at(url) as target:
        address = address_of(target)
        _prepare(target, address)
        with transaction.atomic(using=SOURCE, durable=True):
            health, was_paused = _require_healthy("This database"), outbox.is_paused()
            with transaction.atomic(using=TARGET, durable=True):
                _keep_others_out(target, address)
                tables = _copy_all(target, progress)
                _require_the_same(target, health)
            # The laptop must not go on by mistake; should this fail, the source only goes on.
            outbox.pause(f"moved to {address}"[:160])
    return Moved(tuple(tables), health.counts, address, was_paused)


def _require_from_sqlite_to_postgresql(url: str) -> None:
    if not url.startswith(("postgresql://", "postgres://")):
        raise OperationRefused("Name the target as postgresql://user@host/database.")
    if connection.vendor != "sqlite":
        raise OperationRefused(
            "The database in use is not SQLite: unset DATABASE_URL, or name the SQLite file in it. "
            "From one PostgreSQL to another go by backup and restore."
        )
    if has_tables_to_make():
        raise OperationRefused(
            "The database in use is older than this labplan, or has no tables: run 'manage.py "
            "migrate' first."
        )


@contextmanager
def _target_at(url: str) -> Iterator[BaseDatabaseWrapper]:
    with standing_in(open_database(url, alias=TARGET), alias=TARGET) as target:
        try:
            target.ensure_connection()
        except OperationalError as error:
            raise OperationRefused(f"The target cannot be reached: {str(error).strip()}") from error
        try:
            yield target
        finally:
            target.close()


def _prepare(target: BaseDatabaseWrapper, address: str) -> None:
    """Refuse a target that is not empty; make the tables in one that is."""
    others = foreign_tables(target)
    if others:
        raise OperationRefused(
            f"The target ({address}) holds tables that are not labplan's: {', '.join(others[:5])}. "
            "Make a new, empty database for it."
        )
    _require_no_rows(target, address)
    with standing_in(target):
        if "django_migrations" in connection.introspection.table_names():
            with connection.cursor() as cursor:
                cursor.execute("SELECT app, name FROM django_migrations")
                require_known_migrations(cursor.fetchall(), what=f"The target ({address})")
        make_tables()


def _require_no_rows(target: BaseDatabaseWrapper, address: str) -> None:
    held = tables_with_rows(target)
    if held:
        raise OperationRefused(
            f"The target ({address}) is not empty: {', '.join(held[:5])} "
            f"{'hold' if len(held) > 1 else 'holds'} rows. Make a new, empty database for it."
        )


def _keep_others_out(target: BaseDatabaseWrapper, address: str) -> None:
    """Lock every table of the target until the end: nobody reads half, nobody writes between."""
    names = ", ".join(target.ops.quote_name(table.name) for table in tables_in_order())
    with target.cursor() as cursor:
        cursor.execute(f"LOCK TABLE {names} IN ACCESS EXCLUSIVE MODE")
    _require_no_rows(target, address)


def _require_healthy(what: str) -> Health:
    health = check_health()
    if health.faults:
        shown = "\n  ".join(health.faults[:10])
        raise OperationRefused(f"{what} has {len(health.faults)} fault(s):\n  {shown}")
    return health


def _copy_all(target: BaseDatabaseWrapper, progress: Progress) -> list[MovedTable]:
    tables = tables_in_order()
    total, done = sum(table.count(SOURCE) for table in tables), 0
    moved = []
    for table in tables:
        digest = Digest()
        for number, _ in enumerate(_copy_table(table, target, digest), start=1):
            if number % REPORT_EVERY == 0:
                progress(table.name, done + number, total)
        done += digest.rows
        progress(table.name, done, total)
        _require_equal(table, digest)
        moved.append(MovedTable(table.name, digest.rows, digest.hex))
    with target.cursor() as cursor:
        cursor.execute("ANALYZE")
    _set_sequences(tables, target)
    target.check_constraints()  # the foreign keys, which are deferred
    return moved


def _copy_table(table: Table, target: BaseDatabaseWrapper, digest: Digest) -> Iterator[None]:
    """Stream the rows over, one a step; OperationRefused names the table that did not take them."""
    rows, size = table.rows(SOURCE), FIRST_BATCH
    try:
        while True:
            before = digest.rows
            yield from _copy_batch(table, target, islice(rows, size), digest)
            if digest.rows < before + size:
                return
            # The plan of the books' trigger was made for a table without rows, and is kept: it
            # would read the table for every line. This lets the server make it anew.
            with target.cursor() as cursor:
                cursor.execute(f"ANALYZE {target.ops.quote_name(table.name)}")
            size = min(size * GROWTH, LARGEST_BATCH)
    except (DatabaseError, ValueError) as error:
        raise OperationRefused(
            f"{table.name}: {str(error).strip()}\nNothing was written to the target."
        ) from error
    except ArithmeticError as error:
        raise OperationRefused(
            f"{table.name}, row {digest.rows + 1}: a number has more digits than its column. "
            "Nothing was written to the target."
        ) from error


def _copy_batch(
    table: Table, target: BaseDatabaseWrapper, rows: Iterator[Row], digest: Digest
) -> Iterator[None]:
    quote = target.ops.quote_name
    columns = ", ".join(quote(field.column) for field in table.fields)
    with (
        target.wrap_database_errors,
        target.cursor() as cursor,
        cursor.cursor.copy(f"COPY {quote(table.name)} ({columns}) FROM STDIN") as copy,
    ):
        for row in rows:
            digest.add(row)
            copy.write_row(_for_target(table, row, target))
            yield


def _for_target(table: Table, row: Row, target: BaseDatabaseWrapper) -> list[Any]:
    return [
        field.get_db_prep_save(value, target)
        for field, value in zip(table.fields, row, strict=True)
    ]


def _require_equal(table: Table, sent: Digest) -> None:
    found = digest_of(table, TARGET)
    if found != sent:
        raise OperationRefused(
            f"{table.name} does not hold the same on both sides: {sent.rows} rows were sent, "
            f"{found.rows} arrived, and their digests differ. Nothing was written to the target."
        )


def _set_sequences(tables: list[Table], target: BaseDatabaseWrapper) -> None:
    """Number new rows after every number that was ever given, not only after those still there."""
    with connections[SOURCE].cursor() as cursor:
        cursor.execute("SELECT name, seq FROM sqlite_sequence")
        given: dict[str, int] = dict(cursor.fetchall())
    with target.cursor() as cursor:
        for table in tables:
            key = table.model._meta.auto_field
            if key is not None and given.get(table.name):
                cursor.execute(
                    "SELECT setval(pg_get_serial_sequence(%s, %s), %s)",
                    [target.ops.quote_name(table.name), key.column, given[table.name]],
                )


def _require_the_same(target: BaseDatabaseWrapper, of_source: Health) -> None:
    """Check books and documents on the target too, inside its transaction."""
    with standing_in(target):
        of_target = _require_healthy("The copy")
    if of_target != of_source:
        raise OperationRefused(
            f"The copy has {of_target.counts}, the source {of_source.counts}. Nothing was written."
        )
