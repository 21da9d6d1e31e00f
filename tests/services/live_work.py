"""Real prefork workers, a real relay and a real broker on the database of the tests."""

import contextlib
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from datetime import datetime

from labplan.base import clock
from labplan.operations import programs
from labplan.operations.broker_server import BrokerServer, running_broker
from labplan.operations.supervisor import Program, Supervisor
from tests.db.bench import database_address
from tests.services.clocked import OFFSET_VARIABLE, moved_by, offset_to

WORKER_APP = "tests.services.worker_app"
# Short, so that what was lost comes again while a test waits.
LIMIT_S, LEASE_S = 1, 2
STEP_S = 0.05


class LiveWork:
    """Handles on what runs, for tests that break it."""

    def __init__(self, broker: BrokerServer, supervisor: Supervisor) -> None:
        self.broker = broker
        self.supervisor = supervisor

    def until(self, is_so: Callable[[], bool], *, seconds: float = 60.0) -> None:
        """Look after the programs until something is so; AssertionError when it never is."""
        give_up = time.monotonic() + seconds
        while not is_so():
            assert time.monotonic() < give_up, "it never came to that"
            self.supervisor.look()
            time.sleep(STEP_S)

    def pid(self, name: str) -> int:
        return self.supervisor.process_of(name).pid

    def children(self, name: str) -> list[int]:
        """The processes that a program has forked."""
        listed = subprocess.run(
            ["ps", "-o", "pid=", "--ppid", str(self.pid(name))],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        return [int(line) for line in listed.stdout.split()]


@contextlib.contextmanager
def live_work(
    instant: datetime, *, workers: int = 2, app: str = WORKER_APP, limit_s: int = LIMIT_S
) -> Iterator[LiveWork]:
    """Run workers, relay and broker; the clock of all, this process too, runs from `instant`."""
    offset = offset_to(instant)
    with running_broker() as broker:
        environment = {
            "DATABASE_URL": database_address(),
            "REDIS_URL": broker.address,
            "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
            "LABPLAN_PLAN_LIMIT_S": str(limit_s),
            "LABPLAN_LEASE_S": str(LEASE_S),
            "PYTHONPATH": str(programs.ROOT),
            OFFSET_VARIABLE: offset,
        }
        relay = Program("relay", [sys.executable, "-m", "tests.services.relay_process"])
        started = [programs.worker(processes=workers, app=app), relay]
        supervisor = Supervisor(
            [Program(p.name, p.arguments, {**p.environment, **environment}) for p in started],
            up_after_s=0.0,
        )
        with _clock(offset), supervisor.running():
            yield LiveWork(broker, supervisor)


@contextlib.contextmanager
def _clock(offset: str) -> Iterator[None]:
    with clock.replaced_by(clock.now):
        moved_by(offset)
        yield


def is_alive(pid: int) -> bool:
    """Whether a process is there and not only waiting to be buried."""
    state = subprocess.run(
        ["ps", "-o", "stat=", "-p", str(pid)], capture_output=True, text=True, check=False
    ).stdout.strip()
    return bool(state) and not state.startswith("Z")
