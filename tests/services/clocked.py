"""Sets the clock of a process that tests start: the machine's, moved to the day of the tests.

The seconds come in LABPLAN_TEST_CLOCK_OFFSET_S, so that all processes of a test agree, whenever
they were started. Tests and their processes are the only users.
"""

import os
from datetime import UTC, datetime, timedelta

from labplan.base import clock

OFFSET_VARIABLE = "LABPLAN_TEST_CLOCK_OFFSET_S"


def offset_to(instant: datetime) -> str:
    """What to set the variable to, so that it is `instant` now."""
    return str((instant - datetime.now(UTC)).total_seconds())


def moved_by(offset_s: str) -> None:
    """Move the clock of this process for good."""
    clock._read = lambda: datetime.now(UTC) + timedelta(seconds=float(offset_s))


def move_clock() -> None:
    moved_by(os.environ[OFFSET_VARIABLE])
