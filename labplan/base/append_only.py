"""Tables whose rows never change: the database itself refuses UPDATE, DELETE and TRUNCATE.

A model joins by `append_only = True` as a class attribute and AppendOnlyModel as its base.
An app adds more triggers by registering a function that returns SQL for a vendor.
"""

import re
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import Any

from django.apps import apps
from django.db import connections, models
from django.db.backends.base.base import BaseDatabaseWrapper

MESSAGE = "rows of {table} are never changed; add a new one"
_extra: list[Callable[[str], Iterable[str]]] = []


class AppendOnlyQuerySet(models.QuerySet):
    def update(self, **changes: Any) -> int:
        raise TypeError(f"{self.model.__name__} rows are never changed")

    def delete(self) -> tuple[int, dict[str, int]]:
        raise TypeError(f"{self.model.__name__} rows are never deleted")


class AppendOnlyModel(models.Model):
    """Insert and read; the triggers below say the same to raw SQL."""

    objects = AppendOnlyQuerySet.as_manager()

    class Meta:
        abstract = True

    def save(self, *args: Any, **kwargs: Any) -> None:
        if not self._state.adding:
            raise TypeError(f"{type(self).__name__} rows are never changed")
        super().save(*args, **kwargs)

    def delete(self, *args: Any, **kwargs: Any) -> tuple[int, dict[str, int]]:
        raise TypeError(f"{type(self).__name__} rows are never deleted")


def append_only_tables() -> list[str]:
    return sorted(
        model._meta.db_table for model in apps.get_models() if issubclass(model, AppendOnlyModel)
    )


def register_triggers(sql_for_vendor: Callable[[str], Iterable[str]]) -> None:
    """Add a function (vendor) -> idempotent SQL statements, run after every migrate."""
    if sql_for_vendor not in _extra:
        _extra.append(sql_for_vendor)


def install_all(*, using: str = "default", **_signal: Any) -> None:
    """Install every trigger whose table exists; safe to repeat."""
    connection = connections[using]
    present = set(connection.introspection.table_names())
    with connection.cursor() as cursor:
        for table in append_only_tables():
            if table in present:
                for statement in _statements(connection.vendor, table):
                    cursor.execute(statement)
        if present.issuperset(append_only_tables()):
            for sql_for_vendor in _extra:
                for statement in sql_for_vendor(connection.vendor):
                    cursor.execute(statement)


def missing_triggers(*, using: str = "default") -> set[str]:
    """The triggers that should be installed and are not, or are switched off."""
    connection = connections[using]
    with connection.cursor() as cursor:
        cursor.execute(_INSTALLED[connection.vendor])
        installed = {name for (name,) in cursor.fetchall()}
    return _expected(connection.vendor) - installed


# Those of the tables this connection sees; a trigger that is switched off counts for nothing.
_INSTALLED = {
    "sqlite": "SELECT name FROM sqlite_master WHERE type = 'trigger'",
    "postgresql": "SELECT tgname FROM pg_trigger WHERE NOT tgisinternal "
    "AND tgenabled IN ('O', 'A') AND pg_table_is_visible(tgrelid)",
}
_MADE = re.compile(r"CREATE (?:OR REPLACE )?TRIGGER (?:IF NOT EXISTS )?(\w+)")


def _expected(vendor: str) -> set[str]:
    own = [text for table in append_only_tables() for text in _statements(vendor, table)]
    added = [text for sql_for_vendor in _extra for text in sql_for_vendor(vendor)]
    return {name for text in (*own, *added) for name in _MADE.findall(text)}


@contextmanager
def lifted(connection: BaseDatabaseWrapper) -> Iterator[None]:
    """Take the triggers away while a test database is emptied. For tests only."""
    with connection.cursor() as cursor:
        for table in append_only_tables():
            for statement in _removal(connection.vendor, table):
                cursor.execute(statement)
    try:
        yield
    finally:
        install_all(using=connection.alias)


def _statements(vendor: str, table: str) -> list[str]:
    message = MESSAGE.format(table=table)
    if vendor == "sqlite":
        return [
            f"CREATE TRIGGER IF NOT EXISTS {table}_no_{verb} BEFORE {verb.upper()} ON {table} "
            f"BEGIN SELECT RAISE(ABORT, '{message}'); END"
            for verb in ("update", "delete")
        ]
    return [
        f"CREATE OR REPLACE FUNCTION {table}_refuse() RETURNS trigger LANGUAGE plpgsql AS "
        f"$$ BEGIN RAISE EXCEPTION '{message}' USING ERRCODE = 'restrict_violation'; END $$",
        f"CREATE OR REPLACE TRIGGER {table}_no_change BEFORE UPDATE OR DELETE ON {table} "
        f"FOR EACH ROW EXECUTE FUNCTION {table}_refuse()",
        f"CREATE OR REPLACE TRIGGER {table}_no_truncate BEFORE TRUNCATE ON {table} "
        f"FOR EACH STATEMENT EXECUTE FUNCTION {table}_refuse()",
    ]


def _removal(vendor: str, table: str) -> list[str]:
    names = ("no_update", "no_delete") if vendor == "sqlite" else ("no_change", "no_truncate")
    on_table = "" if vendor == "sqlite" else f" ON {table}"
    return [f"DROP TRIGGER IF EXISTS {table}_{name}{on_table}" for name in names]
