"""Keep a copy of the database in one file."""

import os
import sqlite3
from dataclasses import dataclass
from pathlib import Path

from django.db import connection, transaction

from labplan.operations import files, postgres_programs, sqlite_file
from labplan.operations.errors import OperationRefused
from labplan.operations.files import Progress
from labplan.operations.state import Counts, count_all


@dataclass(frozen=True)
class Backup:
    """A finished backup."""

    path: Path
    size_bytes: int
    sha256: str
    counts: Counts


def make_backup(path: Path, *, force: bool = False, progress: Progress) -> Backup:
    """Write one consistent state to `path`, while labplan works on.

    The file appears whole or not at all, readable by its owner only. Raises OperationRefused;
    nothing is left behind then, and what was at `path` is still there. Safe to repeat.
    """
    _require_free(path, force=force)
    if connection.vendor == "postgresql":
        _require_pg_dump(path)
    with files.draft_beside(path) as draft:
        try:
            copy = _copy_sqlite if connection.vendor == "sqlite" else _copy_postgresql
            counts = copy(draft, progress)
            size, digest = draft.stat().st_size, files.hash_file(draft)
            _require_free(path, force=force)
            files.put_in_place(draft, path)
        except (OSError, sqlite3.OperationalError) as error:
            raise OperationRefused(f"{path} could not be written: {error}.") from error
        except sqlite3.DatabaseError as error:
            raise OperationRefused(f"The database is damaged: {error}.") from error
    return Backup(path, size, digest, counts)


def _require_free(path: Path, *, force: bool) -> None:
    if not path.parent.is_dir():
        raise OperationRefused(f"There is no folder {path.parent}.")
    if not os.access(path.parent, os.W_OK | os.X_OK):
        raise OperationRefused(f"The folder {path.parent} cannot be written.")
    if not path.exists():
        return
    if not path.is_file():
        raise OperationRefused(f"{path} is not a file.")
    if connection.vendor == "sqlite" and path.samefile(connection.settings_dict["NAME"]):
        raise OperationRefused(f"{path} is the database itself; name another file.")
    if not force:
        raise OperationRefused(f"{path} is there already; name another file, or give --force.")


def _require_pg_dump(path: Path) -> None:
    address = postgres_programs.address_of(connection)
    postgres_programs.find_program("pg_dump", postgres_programs.dump_command(address, path))


def _copy_sqlite(draft: Path, progress: Progress) -> Counts:
    source = Path(connection.settings_dict["NAME"])
    if not source.exists() or not sqlite_file.applied_migrations(source):
        raise OperationRefused("There is no database yet: run 'manage.py migrate' first.")
    sqlite_file.copy_state(source, draft, progress)
    sqlite_file.require_sound(draft, what="The database")
    with sqlite_file.opened(draft) as copy:
        return count_all(lambda sql: copy.execute(sql).fetchone()[0])


def _copy_postgresql(draft: Path, progress: Progress) -> Counts:
    """pg_dump reads the state that this transaction sees, so that the counts are the file's."""
    with transaction.atomic(durable=True), connection.cursor() as cursor:
        cursor.execute("SET TRANSACTION ISOLATION LEVEL REPEATABLE READ, READ ONLY")

        def ask(sql: str):  # type: ignore[no-untyped-def]
            cursor.execute(sql)
            return cursor.fetchone()[0]

        counts = count_all(ask)
        snapshot = ask("SELECT pg_export_snapshot()")
        address = postgres_programs.address_of(connection)
        command = postgres_programs.dump_command(address, draft, snapshot=snapshot)
        postgres_programs.run_program("pg_dump", command, connection)
    return counts
