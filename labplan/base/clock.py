"""The one clock. Nothing else in labplan asks the machine or the database for the time."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

from django.conf import settings


def _system_now() -> datetime:
    return datetime.now(UTC)


_read: Callable[[], datetime] = _system_now


def now() -> datetime:
    """The instant, in UTC."""
    return _read()


def today() -> date:
    """The date in the laboratory's time zone; expiry dates are valid to the end of it."""
    return now().astimezone(ZoneInfo(settings.LAB_TIME_ZONE)).date()


@contextmanager
def replaced_by(read: Callable[[], datetime]) -> Iterator[None]:
    """Let every thread of this process read another clock for a while."""
    global _read  # noqa: PLW0603 - one clock a process is the point
    before, _read = _read, read
    try:
        yield
    finally:
        _read = before


def standing_at(instant: datetime) -> Callable[[], datetime]:
    """A clock that does not move."""
    return lambda: instant


def running_from(instant: datetime) -> Callable[[], datetime]:
    """A clock that starts at `instant` and then runs at its usual pace."""
    offset: timedelta = instant - _system_now()
    return lambda: _system_now() + offset
