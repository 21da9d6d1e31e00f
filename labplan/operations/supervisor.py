"""Keep a handful of programs running, start again what dies, and end all of it together."""

import contextlib
import logging
import os
import subprocess
import threading
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from labplan.base.endings import PATIENCE_S, end_process, tied

logger = logging.getLogger(__name__)

LOOK_EVERY_S = 0.2
# A program that ran shorter than this has not come up; its next start waits longer each time.
UP_AFTER_S = 5.0
LONGEST_WAIT_S = 30.0
MOST_FAILED_STARTS = 6


class ProgramFailsError(RuntimeError):
    """A program ended again and again right after its start."""


@dataclass(frozen=True)
class Program:
    name: str
    arguments: Sequence[str]
    environment: dict[str, str] = field(default_factory=dict)


@dataclass
class _Running:
    program: Program
    process: subprocess.Popen[bytes]
    started_at: float
    failed_starts: int = 0
    start_again_at: float = 0.0


class Supervisor:
    """Start programs in their order; `watch` starts again what has died; end in reverse order."""

    def __init__(self, programs: Sequence[Program], *, up_after_s: float = UP_AFTER_S) -> None:
        self._programs = programs
        self._up_after_s = up_after_s
        self._running: list[_Running] = []
        self.stop_asked = threading.Event()

    @contextlib.contextmanager
    def running(self) -> Iterator["Supervisor"]:
        try:
            for program in self._programs:
                self._running.append(_Running(program, _start(program), time.monotonic()))
            yield self
        finally:
            self._end_all()

    def watch(self) -> None:
        """Until `stop_asked` is set. Raises ProgramFailsError."""
        while not self.stop_asked.wait(LOOK_EVERY_S):
            self.look()

    def look(self) -> None:
        """Start again what has died; one that never comes up is an error."""
        now = time.monotonic()
        for running in self._running:
            if running.process.poll() is None:
                continue
            if not running.start_again_at:
                self._plan_restart(running, now)
            if now >= running.start_again_at:
                running.process = _start(running.program)
                running.started_at, running.start_again_at = now, 0.0

    def process_of(self, name: str) -> subprocess.Popen[bytes]:
        return next(r.process for r in self._running if r.program.name == name)

    def _plan_restart(self, running: _Running, now: float) -> None:
        came_up = now - running.started_at >= self._up_after_s
        running.failed_starts = 0 if came_up else running.failed_starts + 1
        if running.failed_starts >= MOST_FAILED_STARTS:
            raise ProgramFailsError(
                f"{running.program.name} ended {MOST_FAILED_STARTS} times right after its start, "
                f"the last time with {running.process.returncode}; its own words stand above."
            )
        wait_s = min(LONGEST_WAIT_S, 0.25 * 2**running.failed_starts)
        running.start_again_at = now + wait_s
        logger.warning(
            "%s ended with %s; starting it again in %.1f s",
            running.program.name, running.process.returncode, wait_s,
        )  # fmt: skip

    def _end_all(self) -> None:
        """Each has its time to finish what it does; those that stand on others go first."""
        give_up = time.monotonic() + PATIENCE_S
        for running in reversed(self._running):
            left_s = max(0.5, give_up - time.monotonic())
            end_process(running.process, patience_s=left_s)
        self._running.clear()


def _start(program: Program) -> subprocess.Popen[bytes]:
    # A session of its own: Ctrl-C reaches the supervisor alone, which ends the others in order.
    return subprocess.Popen(
        tied(program.arguments),
        env={**os.environ, **program.environment},
        stdin=subprocess.DEVNULL,
        start_new_session=True,
    )
