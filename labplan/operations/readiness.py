"""Whether this process can do its work now: one check a part, each with a word on what to do.

The answers are public: no address, path, name or error text in them. The log has the errors.
"""

import logging
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

from django.conf import settings
from django.db import connection
from django.db.migrations.loader import MigrationLoader
from django.db.migrations.recorder import MigrationRecorder

from labplan import datafiles
from labplan.base import append_only, broker, outbox, warming

logger = logging.getLogger(__name__)
# The oldest unfinished message is worth a warning when it is older than this.
WAITED_LONG_S = 300
NOT_LOOKED_AT = "Not looked at: the database does not answer."
_noted: frozenset[str] = frozenset()


class NotReady(Exception):
    """A check that failed; its text is shown to everybody."""


@dataclass(frozen=True)
class Check:
    """A part that is looked at. What is not required is a warning when it fails."""

    name: str
    look: Callable[[], str]
    is_required: bool = True
    needs_database: bool = False


@dataclass(frozen=True)
class Finding:
    name: str
    is_ok: bool
    is_required: bool
    detail: str
    duration_ms: float


@dataclass(frozen=True)
class Readiness:
    findings: tuple[Finding, ...]

    @property
    def is_ready(self) -> bool:
        return all(found.is_ok for found in self.findings if found.is_required)

    @property
    def status(self) -> str:
        if not self.is_ready:
            return "not_ready"
        return "ready" if all(found.is_ok for found in self.findings) else "ready_with_warnings"


def look_at_readiness() -> Readiness:
    """Run every check; none of them raises. What changed since the last look is logged."""
    findings: list[Finding] = []
    is_database_there = True
    for check in CHECKS:
        found = _find(check, is_database_there)
        findings.append(found)
        if check.name == "database":
            is_database_there = found.is_ok
    _log_changes(findings)
    return Readiness(tuple(findings))


def _find(check: Check, is_database_there: bool) -> Finding:
    started = time.monotonic()
    try:
        if check.needs_database and not is_database_there:
            raise NotReady(NOT_LOOKED_AT)
        is_ok, detail = True, check.look()
    except NotReady as error:
        is_ok, detail = False, str(error)
    except Exception as error:
        is_ok, detail = False, "The check broke off; the log of this process says why."
        _remember_error(check.name, error)
    duration_ms = round((time.monotonic() - started) * 1000, 1)
    return Finding(check.name, is_ok, check.is_required, detail, duration_ms)


_errors: dict[str, str] = {}


def _remember_error(name: str, error: Exception) -> None:
    _errors[name] = f"{type(error).__name__}: {error}"


def _log_changes(findings: list[Finding]) -> None:
    """One line when a check begins to fail or works again, not one with every look."""
    global _noted  # noqa: PLW0603 - what this process has said already
    looked = [found for found in findings if found.detail != NOT_LOOKED_AT]
    failed = frozenset(found.name for found in looked if not found.is_ok)
    for found in looked:
        if found.name in failed - _noted:
            why = f"{found.detail} {_errors.pop(found.name, '')}".strip()
            logger.warning("check %s fails: %s", found.name, why, extra={"check": found.name})
        elif found.name in _noted - failed:
            logger.info("check %s is well again", found.name, extra={"check": found.name})
    _noted = failed


# ---- the checks ----


def _look_at_database() -> str:
    try:
        with connection.cursor() as cursor:
            cursor.execute("SELECT 1")
            cursor.fetchone()
    except Exception as error:
        _remember_error("database", error)
        raise NotReady("The database does not answer: start it, or look at DATABASE_URL.") from None
    return "It answers."


@cache
def _migrations_in_code() -> frozenset[tuple[str, str]]:
    """Read once: the code of a running process does not change."""
    return frozenset(MigrationLoader(None, ignore_no_migrations=True).disk_migrations)


def _look_at_migrations() -> str:
    applied = set(MigrationRecorder(connection).applied_migrations())
    missing = _migrations_in_code() - applied
    if missing:
        raise NotReady(f"{len(missing)} are not applied: run 'manage.py migrate'.")
    return "All are applied."


def _look_at_triggers() -> str:
    missing = append_only.missing_triggers()
    if missing:
        _errors["triggers"] = ", ".join(sorted(missing))
        raise NotReady(
            f"{len(missing)} that protect the books are missing: run 'manage.py migrate'."
        )
    return "All are installed."


def _look_at_broker() -> str:
    if not settings.BROKER_URL:
        return "None is configured: requests are taken and wait."
    try:
        broker.client().ping()
    except Exception as error:
        _remember_error("broker", error)
        raise NotReady("The broker does not answer: start it, or look at REDIS_URL.") from None
    return "It answers."


def _look_at_data() -> str:
    loaded = datafiles.data_version()
    try:
        is_same = datafiles.version_on_disk() == loaded
    except OSError as error:
        _remember_error("data", error)
        raise NotReady("The packaged tables cannot be read: install labplan again.") from None
    if not is_same:
        raise NotReady("The packaged tables changed under this process: restart it.")
    return f"Version {loaded} is loaded."


def _look_at_engine() -> str:
    if not warming.is_warm():
        raise NotReady("The engine cannot plan its own test target; the log says why.")
    return "It has planned its test target."


def _look_at_outbox() -> str:
    figures = outbox.outbox_figures()
    if figures.is_paused:
        raise NotReady("It is paused: nothing is sent until 'manage.py outbox resume'.")
    if figures.oldest_age_s > WAITED_LONG_S:
        raise NotReady(
            f"The oldest unfinished message has waited {figures.oldest_age_s:.0f} s: look at the "
            "relay and the workers."
        )
    return "Nothing has waited long."


CHECKS = (
    Check("database", _look_at_database),
    Check("migrations", _look_at_migrations, needs_database=True),
    Check("triggers", _look_at_triggers, needs_database=True),
    Check("broker", _look_at_broker),
    Check("data", _look_at_data),
    Check("engine", _look_at_engine),
    Check("outbox", _look_at_outbox, is_required=False, needs_database=True),
)
