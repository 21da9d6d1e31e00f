"""Take a backup back, with its outbox paused before anybody can see it.

What was on its way when the backup was taken may have been done since, in the world that is given
up: a person looks first, then resumes.
"""

from dataclasses import dataclass
from pathlib import Path

from django.db import connection

from labplan.base import clock, outbox
from labplan.operations import restore_postgresql, restore_sqlite
from labplan.operations.errors import OperationRefused
from labplan.operations.files import Progress
from labplan.operations.state import Health, check_health, make_tables


@dataclass(frozen=True)
class Restored:
    """What is in place now."""

    health: Health
    recalled: int  # messages that were on their way in the backup
    kept_as: Path | None  # the file that was there before


def restore_backup(
    path: Path, *, replace: bool = False, with_faults: bool = False, progress: Progress
) -> Restored:
    """Put the backup in the place of the database, paused.

    Raises OperationRefused. On SQLite nothing is changed then. On PostgreSQL the database must be
    empty; only a backup that turns out to be faulty when it is in there stays, paused.
    """
    if connection.vendor == "postgresql":
        return _into_postgresql(path, replace=replace, with_faults=with_faults)
    with restore_sqlite.draft_of(path, replace=replace, progress=progress) as draft:
        with restore_sqlite.working_on_file(draft):
            health, recalled = _settle_in(path)
        if health.faults and not with_faults:
            raise OperationRefused(_tell_faults(path, health) + " Nothing was changed.")
        kept_as = restore_sqlite.install(draft)
    return Restored(health, recalled, kept_as)


def _into_postgresql(path: Path, *, replace: bool, with_faults: bool) -> Restored:
    if replace:
        raise OperationRefused(
            "--replace is for SQLite: make a new, empty database and name it in DATABASE_URL."
        )
    restore_postgresql.load(path, pause=lambda: outbox.pause(reason_of(path)))
    health, recalled = _settle_in(path)
    if health.faults and not with_faults:
        raise OperationRefused(
            _tell_faults(path, health) + " The database holds it now; its outbox stays paused."
        )
    return Restored(health, recalled, None)


def _settle_in(path: Path) -> tuple[Health, int]:
    """Everything that must be done before the restored database is used, on the default one."""
    make_tables()
    outbox.pause(reason_of(path))
    recalled = outbox.recall_sent()
    return check_health(), recalled


def reason_of(path: Path) -> str:
    """What stands in the pause, 160 characters at most."""
    return f"restored {clock.now():%Y-%m-%d %H:%M} UTC from {path.name[-100:]}"


def _tell_faults(path: Path, health: Health) -> str:
    shown = "\n  ".join(health.faults[:10])
    return f"{path} has {len(health.faults)} fault(s):\n  {shown}\n"
