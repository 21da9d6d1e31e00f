"""The SQLite side of a restore: a checked draft beside the database, then put in its place."""

import contextlib
import os
import shutil
import sqlite3
from collections.abc import Iterator
from pathlib import Path

from django.db import DatabaseError, connection

from labplan.base import clock
from labplan.operations import files, sqlite_file
from labplan.operations.elsewhere import sqlite_url, working_on
from labplan.operations.errors import OperationRefused
from labplan.operations.files import Progress
from labplan.operations.state import require_labplans, tables_with_rows

# what SQLite keeps beside a database that was not closed in order
LOGS = ("-wal", "-journal")


@contextlib.contextmanager
def draft_of(path: Path, *, replace: bool, progress: Progress) -> Iterator[Path]:
    """A checked copy of the backup in the database's folder; gone at the end if not installed.

    Raises OperationRefused while the database that is there holds data or is in use.
    """
    place = _place()
    sqlite_file.require_sqlite(path)
    if place.exists() and path.samefile(place):
        raise OperationRefused(f"{path} is the database itself; name a backup.")
    _require_replaceable(place, replace=replace)
    place.parent.mkdir(parents=True, exist_ok=True)
    with files.draft_beside(place) as draft:
        try:
            sqlite_file.copy_state(path, draft, progress)
        except sqlite3.DatabaseError as error:
            raise OperationRefused(f"{path} is damaged or in use: {error}.") from error
        sqlite_file.require_sound(draft, what=str(path))
        require_labplans(sqlite_file.applied_migrations(draft), what=str(path))
        yield draft


@contextlib.contextmanager
def working_on_file(draft: Path) -> Iterator[None]:
    """Let the services work on the draft; afterwards it is one file again."""
    with working_on(sqlite_url(draft)):
        yield
    sqlite_file.require_alone(draft)


def install(draft: Path) -> Path | None:
    """Put the draft in place; return the dated name that the database before it has now."""
    place = _place()
    kept_as = None
    if place.exists():
        sqlite_file.require_alone(place)  # somebody may have come in since the first look
        kept_as = _dated_name(place)
    _give_owner_of(place if place.exists() else place.parent, draft)
    if place.exists():
        shutil.copymode(place, draft)
    if kept_as is not None:
        _move_logs(place, kept_as)
    files.put_in_place(draft, place, keep_as=kept_as)
    return kept_as


def _place() -> Path:
    return Path(connection.settings_dict["NAME"])


def _require_replaceable(place: Path, *, replace: bool) -> None:
    if not place.exists():
        _require_no_log_of(place)
        return
    held = _what_is_held()
    if held and not replace:
        raise OperationRefused(
            f"{place} {held}. Give --replace to put the backup in its place; the present file is "
            "kept beside it under a dated name."
        )
    sqlite_file.require_alone(place)


def _what_is_held() -> str:
    """In words, what would be lost; empty when nothing would."""
    try:
        held = len(tables_with_rows(connection))
    except DatabaseError as error:
        return f"cannot be read ({error})"  # perhaps the reason for the restore
    finally:
        connection.close()  # or this process itself would keep the file in use
    return f"holds data ({held} tables with rows)" if held else ""


def _require_no_log_of(place: Path) -> None:
    """SQLite would read a log that another database has left as one of the restored file's."""
    for suffix in LOGS:
        log = place.with_name(place.name + suffix)
        if log.exists():
            raise OperationRefused(f"{log} is there without its database: move it away first.")


def _move_logs(place: Path, kept_as: Path) -> None:
    """A damaged database keeps its logs; a sound one has none by now."""
    for suffix in LOGS:
        log = place.with_name(place.name + suffix)
        if log.exists():
            os.rename(log, kept_as.with_name(kept_as.name + suffix))
    place.with_name(place.name + "-shm").unlink(missing_ok=True)


def _dated_name(place: Path) -> Path:
    stem = f"{place.name}.before-restore-{clock.now():%Y%m%dT%H%M%SZ}"
    names = [place.with_name(stem), *(place.with_name(f"{stem}-{n}") for n in range(2, 100))]
    return next(name for name in names if not name.exists())


def _give_owner_of(model: Path, draft: Path) -> None:
    """The service's own account must be able to open what root has restored."""
    owner = model.stat()
    if (owner.st_uid, owner.st_gid) != (draft.stat().st_uid, draft.stat().st_gid):
        with contextlib.suppress(PermissionError):
            os.chown(draft, owner.st_uid, owner.st_gid)
