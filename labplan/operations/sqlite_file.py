"""SQLite databases as files: copied while in use, checked, put in place whole."""

import contextlib
import os
import sqlite3
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from urllib.parse import quote

from labplan.operations.errors import OperationRefused
from labplan.operations.state import Migration

Progress = Callable[[int, int], None]

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


@contextlib.contextmanager
def draft_beside(place: Path) -> Iterator[Path]:
    """A new file in the folder of `place`, readable by its owner only; gone at the end."""
    handle, name = tempfile.mkstemp(dir=place.parent, prefix=f".{place.name}.", suffix=".part")
    os.close(handle)
    try:
        yield Path(name)
    finally:
        for suffix in ("", "-wal", "-shm", "-journal"):
            Path(name + suffix).unlink(missing_ok=True)


def require_sqlite(path: Path) -> None:
    """Refuse a file that is not there, or is not SQLite's."""
    try:
        with path.open("rb") as file:
            start = file.read(len(HEADER))
    except OSError as error:
        raise OperationRefused(f"{path} cannot be read: {error.strerror}.") from error
    if start != HEADER:
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
        f"row {row} of {table} points to a {to} that is not there" for table, row, to, _ in strays
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

    To leave the write-ahead log SQLite needs the file for itself; afterwards it is one file.
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


def put_in_place(draft: Path, place: Path, *, keep_as: Path | None = None) -> None:
    """Flush `draft` and give it the name `place`, at once; keep what was there as `keep_as`."""
    flush(draft)
    if keep_as is not None:
        try:
            os.link(place, keep_as)  # so that there is a database at every moment
        except OSError:
            os.rename(place, keep_as)  # a file system without links
    os.replace(draft, place)
    flush(place.parent)


def flush(path: Path) -> None:
    """See that a file's bytes, or a folder's names, are on the disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
