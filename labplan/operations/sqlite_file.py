"""SQLite databases as files: copied while in use, and checked."""

import contextlib
import sqlite3
from collections.abc import Iterator
from pathlib import Path
from urllib.parse import quote

from labplan.operations.errors import OperationRefused
from labplan.operations.files import Progress, read_start
from labplan.operations.state import Migration

HEADER = b"SQLite format 3\0"
PAGES_A_STEP = 1000
# How long a lock is waited for; a reader or a short write is over by then.
PATIENCE_S = 2.0
MOST_FAULTS_SHOWN = 5


@contextlib.contextmanager
def opened(path: Path) -> Iterator[sqlite3.Connection]:
    """A plain connection, outside Django, to a file that is there."""
    connection = sqlite3.connect(
        f"file:{quote(str(path.absolute()))}?mode=rw",
        uri=True, timeout=PATIENCE_S, isolation_level=None,
    )  # fmt: skip
    try:
        yield connection
    finally:
        connection.close()


def require_sqlite(path: Path) -> None:
    """Refuse a file that is not there, or is not SQLite's."""
    if read_start(path, len(HEADER)) != HEADER:
        raise OperationRefused(f"{path} is not an SQLite database.")


def copy_state(source: Path, target: Path, progress: Progress) -> None:
    """Copy one consistent state of `source`, whatever is written to it meanwhile.

    The read transaction holds that state for the whole copy; without it the copy would start
    again at every write, under load for ever.
    """
    with opened(source) as reading, opened(target) as writing:
        reading.execute("BEGIN")
        reading.execute("SELECT count(*) FROM sqlite_master").fetchone()
        reading.backup(
            writing,
            pages=PAGES_A_STEP,
            progress=lambda _, left, total: progress(total - left, total),
            sleep=0.05,
        )
        reading.execute("ROLLBACK")
        # One file that stands for itself, without a log beside it.
        writing.execute("PRAGMA journal_mode=DELETE")


def require_sound(path: Path, *, what: str) -> None:
    """Refuse a file whose pages or foreign keys are broken."""
    try:
        with opened(path) as connection:
            rows = connection.execute(f"PRAGMA integrity_check({MOST_FAULTS_SHOWN})").fetchall()
            faults = [text for (text,) in rows if text != "ok"]
            strays = connection.execute("PRAGMA foreign_key_check").fetchmany(MOST_FAULTS_SHOWN)
    except sqlite3.DatabaseError as error:
        raise OperationRefused(f"{what} is damaged: {error}.") from error
    faults += [
        f"row {row} of {table} points to a row of {to} that is not there"
        for table, row, to, _ in strays
    ]
    if faults:
        raise OperationRefused(f"{what} is damaged: {'; '.join(faults)}.")


def applied_migrations(path: Path) -> list[Migration]:
    """What `migrate` has noted in the file; empty when it has never run there."""
    with opened(path) as connection:
        try:
            return connection.execute("SELECT app, name FROM django_migrations").fetchall()
        except sqlite3.OperationalError:
            return []


def require_alone(path: Path) -> None:
    """Refuse while another process has the database open.

    To leave the write-ahead log SQLite needs the file for itself; afterwards it is one file. A
    damaged file cannot be asked and passes.
    """
    try:
        with opened(path) as connection:
            connection.execute("PRAGMA journal_mode=DELETE").fetchone()
            connection.execute("BEGIN EXCLUSIVE")
            connection.execute("ROLLBACK")
    except sqlite3.OperationalError as error:
        if "locked" not in str(error):
            raise
        raise OperationRefused(
            f"{path} is in use: stop labplan (web, workers, relay) first, then try again."
        ) from error
    except sqlite3.DatabaseError:
        return
