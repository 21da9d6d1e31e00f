"""Let labplan's services work on another database for a while: a restored file, a new server.

The other database takes the place of the default one in this thread, so that every service, and
migrate too, finds it without knowing.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.parse import quote

from django.db import DEFAULT_DB_ALIAS, connections
from django.db.backends.base.base import BaseDatabaseWrapper
from django.db.utils import load_backend

from labplan.settings.database import database_from_url


def open_database(url: str, *, alias: str = DEFAULT_DB_ALIAS) -> BaseDatabaseWrapper:
    """A connection to another database, opened when it is first used."""
    complete: dict[str, Any] = connections.configure_settings(
        {DEFAULT_DB_ALIAS: database_from_url(url)}
    )
    entry = complete[DEFAULT_DB_ALIAS]
    wrapper: BaseDatabaseWrapper = load_backend(entry["ENGINE"]).DatabaseWrapper(entry, alias)
    return wrapper


def sqlite_url(path: Path) -> str:
    return f"sqlite:///{quote(str(path))}"


@contextmanager
def standing_in(
    database: BaseDatabaseWrapper, *, alias: str = DEFAULT_DB_ALIAS
) -> Iterator[BaseDatabaseWrapper]:
    """Give `database` the place of `alias`; what had the place is back at the end, untouched."""
    before = connections[alias] if alias in connections.settings else None
    connections[alias] = database
    try:
        yield database
    finally:
        if before is None:
            del connections[alias]
        else:
            connections[alias] = before


@contextmanager
def working_on(url: str) -> Iterator[BaseDatabaseWrapper]:
    """As `standing_in`, with a connection of its own that is closed at the end."""
    with standing_in(open_database(url)) as database:
        try:
            yield database
        finally:
            database.close()
