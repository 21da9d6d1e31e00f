"""What a database holds and how far its tables are: asked before anything is done to it."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass

from django.apps import apps
from django.core.management import call_command
from django.db import DEFAULT_DB_ALIAS, connections, models
from django.db.backends.base.base import BaseDatabaseWrapper
from django.db.migrations.executor import MigrationExecutor
from django.db.migrations.loader import MigrationLoader

from inventory.services.verify import verify_ledger
from labplan.operations.errors import OperationRefused
from labplan.procedures.services import verify_documents

Migration = tuple[str, str]
# without these a file is somebody else's
FIRST_MIGRATIONS = {("base", "0001_initial"), ("inventory", "0001_initial")}


@dataclass(frozen=True)
class Counts:
    """How much there is, for the operator to compare."""

    bottles: int
    movements: int
    documents: int

    def __str__(self) -> str:
        return f"{self.bottles} bottles, {self.movements} movements, {self.documents} documents"


def stored_models() -> list[type[models.Model]]:
    """Every model with a table of its own, those of many-to-many fields too."""
    return [
        model
        for model in apps.get_models(include_auto_created=True)
        if model._meta.managed and not model._meta.proxy
    ]


def table_of(label: str) -> str:
    return apps.get_model(label)._meta.db_table


def count_all(ask: Callable[[str], int]) -> Counts:
    """Count by SQL that `ask` runs, on whatever connection it has."""
    labels = ("inventory.Bottle", "inventory.Movement", "procedures.Document")
    return Counts(*(ask(f'SELECT count(*) FROM "{table_of(label)}"') for label in labels))


def tables_with_rows(database: BaseDatabaseWrapper) -> list[str]:
    """The tables of labplan that are there and hold anything."""
    present = set(database.introspection.table_names())
    wanted = sorted({model._meta.db_table for model in stored_models()} & present)
    with database.cursor() as cursor:
        return [table for table in wanted if _has_rows(cursor, table)]


def _has_rows(cursor, table: str) -> bool:  # type: ignore[no-untyped-def]
    cursor.execute(f'SELECT 1 FROM "{table}" LIMIT 1')
    return cursor.fetchone() is not None


def foreign_tables(database: BaseDatabaseWrapper) -> list[str]:
    """Tables that are none of labplan's."""
    ours = {model._meta.db_table for model in stored_models()} | {"django_migrations"}
    return sorted(set(database.introspection.table_names()) - ours)


def require_known_migrations(applied: Iterable[Migration], *, what: str) -> None:
    """Refuse what a newer labplan has made."""
    unknown = sorted(set(applied) - set(MigrationLoader(None).disk_migrations))
    if unknown:
        names = ", ".join(f"{app}.{name}" for app, name in unknown)
        raise OperationRefused(
            f"{what} was made by a newer labplan: this one does not know {names}. Upgrade labplan "
            "first, then try again."
        )


def require_labplans(applied: Iterable[Migration], *, what: str) -> None:
    """Refuse what is not labplan's, and what a newer labplan has made."""
    applied = list(applied)
    if not FIRST_MIGRATIONS.issubset(applied):
        raise OperationRefused(f"{what} is no database of labplan: its tables are not there.")
    require_known_migrations(applied, what=what)


def has_tables_to_make() -> bool:
    """Whether the default database is behind this code."""
    executor = MigrationExecutor(connections[DEFAULT_DB_ALIAS])
    return bool(executor.migration_plan(executor.loader.graph.leaf_nodes()))


def make_tables() -> None:
    """Bring the default database up to this code, and see that it has every column."""
    call_command("migrate", verbosity=0, interactive=False)
    require_all_columns(connections[DEFAULT_DB_ALIAS])


def require_all_columns(database: BaseDatabaseWrapper) -> None:
    """Refuse tables that only claim to be as new as this code."""
    missing: list[str] = []
    present = set(database.introspection.table_names())
    with database.cursor() as cursor:
        for model in stored_models():
            table = model._meta.db_table
            found = set()
            if table in present:
                rows = database.introspection.get_table_description(cursor, table)
                found = {row.name for row in rows}
            wanted = {field.column for field in model._meta.local_concrete_fields}
            missing += [f"{table}.{column}" for column in sorted(wanted - found)]
    if missing:
        raise OperationRefused(
            "The tables do not fit this labplan; missing: " + ", ".join(missing) + ". Use the "
            "version that made them."
        )


@dataclass(frozen=True)
class Health:
    """What the two checks of the default database found."""

    counts: Counts
    faults: tuple[str, ...]


def check_health() -> Health:
    """Re-add every book and hash every document."""
    ledger, documents = verify_ledger(), verify_documents()
    faults = [f"{f.bottle}, {f.where}: {f.detail}" for f in ledger.faults]
    faults += [f"{f.procedure}, {f.where}: {f.detail}" for f in documents.faults]
    return Health(
        Counts(ledger.bottles, ledger.movements, documents.documents),
        tuple(faults),
    )
