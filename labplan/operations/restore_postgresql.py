"""The PostgreSQL side of a restore: pg_restore into an empty database."""

import contextlib
import re
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

from django.db import connection

from labplan.operations.errors import OperationRefused
from labplan.operations.files import read_start
from labplan.operations.postgres_programs import address_of, run_program
from labplan.operations.state import Migration, require_labplans, table_of

HEADER = b"PGDMP"
OPTIONS = ["--no-owner", "--no-privileges", "--exit-on-error", "--single-transaction"]


def load(path: Path, *, pause: Callable[[], None]) -> None:
    """Load the dump. The pause is committed before the first message can be seen.

    First the table of the pause alone is made and `pause` is called, then everything else comes
    in one transaction. Raises OperationRefused.
    """
    _require_dump(path)
    _require_empty_and_unused()
    entries = run_program("pg_restore", ["--list", str(path)], connection).splitlines()
    require_labplans(_migrations_in(path), what=str(path))
    table = table_of("base.OutboxPause")
    of_pause = [line for line in entries if table in line]
    if of_pause:
        _restore(path, [line for line in of_pause if " TABLE DATA " not in line])
        pause()
    try:
        _restore(path, [line for line in entries if line not in of_pause])
    except OperationRefused as error:
        raise OperationRefused(
            f"{error.detail}\nThe database is not empty any more: drop it and make it anew."
        ) from error


def _restore(path: Path, entries: list[str]) -> None:
    connection.close()  # no session of ours may hold a lock meanwhile
    with _list_file(entries) as wanted:
        command = [*OPTIONS, f"--use-list={wanted}", f"--dbname={address_of(connection)}"]
        run_program("pg_restore", [*command, str(path)], connection)


@contextlib.contextmanager
def _list_file(entries: list[str]) -> Iterator[Path]:
    with tempfile.NamedTemporaryFile("w", prefix="labplan-restore-", suffix=".list") as file:
        file.write("\n".join(entries) + "\n")
        file.flush()
        yield Path(file.name)


def _require_dump(path: Path) -> None:
    if read_start(path, len(HEADER)) != HEADER:
        raise OperationRefused(
            f"{path} is no dump of pg_dump in the custom format. A backup of SQLite is restored on "
            "SQLite and then moved with 'manage.py move_up'."
        )


def _require_empty_and_unused() -> None:
    name = connection.settings_dict["NAME"]
    tables = connection.introspection.table_names()
    if tables:
        raise OperationRefused(
            f"The database {name} is not empty ({len(tables)} tables). Make a new one with "
            "createdb, name it in DATABASE_URL and restore into that."
        )
    others = other_sessions()
    if others:
        raise OperationRefused(
            f"{others} other session(s) use the database {name}: stop labplan (web, workers, "
            "relay) first, then try again."
        )


def other_sessions() -> int:
    """How many other programs are connected to the default database."""
    with connection.cursor() as cursor:
        cursor.execute(
            "SELECT count(*) FROM pg_stat_activity WHERE datname = current_database() "
            "AND pid <> pg_backend_pid() AND backend_type = 'client backend'"
        )
        return int(cursor.fetchone()[0])


def _migrations_in(path: Path) -> list[Migration]:
    """What the dump's django_migrations says, without loading it."""
    command = ["--data-only", "--table=django_migrations", "--file=-", str(path)]
    text = run_program("pg_restore", command, connection)
    head = re.search(r"^COPY \S*django_migrations \(([^)]*)\) FROM stdin;$", text, re.MULTILINE)
    if head is None:
        return []
    columns = [name.strip() for name in head[1].split(",")]
    lines = text[head.end() + 1 :].split("\n\\.\n", 1)[0].splitlines()
    rows = [dict(zip(columns, line.split("\t"), strict=True)) for line in lines if line]
    return [(row["app"], row["name"]) for row in rows]
