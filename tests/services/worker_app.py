"""labplan's own worker on the tests' clock, with two targets that no engine survives.

A real fault in C++ code cannot be ordered, so the ends are made by hand where planning begins: the
process gets SIGSEGV, or it stops in C with Python's lock held, where no Python signal handler runs.
"""

import ctypes
import os
import signal
from typing import Any

from labplan.celery import app
from labplan.procedures.services import planning
from tests.services.clocked import move_clock
from tests.targets import CRASHING, HANGING

__all__ = ["app"]

move_clock()
_compute_plan = planning.compute_plan


def _compute_or_end(attempt: planning.Attempt) -> Any:
    if attempt.smiles == CRASHING:
        os.kill(os.getpid(), signal.SIGSEGV)
    if attempt.smiles == HANGING:
        ctypes.PyDLL(None).pause()
    return _compute_plan(attempt)


planning.compute_plan = _compute_or_end
