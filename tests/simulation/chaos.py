"""Break what runs, at random: children, workers, relay, broker, database connections."""

import os
import random
import signal
import time
from collections import Counter
from contextlib import suppress

from django.db import connection

from tests.db.bench import ON_POSTGRESQL, run_sql
from tests.services.live_work import LiveWork

SHORTEST_PEACE_S, LONGEST_PEACE_S = 0.1, 0.8


class Chaos:
    """One seeded run of breakages; `done` counts them by kind."""

    def __init__(self, work: LiveWork, rng: random.Random) -> None:
        self._work = work
        self._rng = rng
        self._next_at = 0.0
        self.done: Counter[str] = Counter()
        self._acts = [self.kill_child, self.kill_worker, self.kill_relay, self.wipe_broker]
        if ON_POSTGRESQL:
            self._acts.append(self.cut_connections)

    def act_when_due(self) -> None:
        """Break one thing when its time has come."""
        now = time.monotonic()
        if now < self._next_at:
            return
        self._next_at = now + self._rng.uniform(SHORTEST_PEACE_S, LONGEST_PEACE_S)
        # Children die more often than all else: that is what happens.
        [act] = self._rng.choices(self._acts, weights=[5, 1, 1, 1, 2][: len(self._acts)])
        act()
        self.done[act.__name__] += 1

    def kill_child(self) -> None:
        children = self._work.children("worker")
        if children:
            _kill(self._rng.choice(children))

    def kill_worker(self) -> None:
        _kill(self._work.pid("worker"))

    def kill_relay(self) -> None:
        _kill(self._work.pid("relay"))

    def wipe_broker(self) -> None:
        self._work.broker.stop()
        time.sleep(self._rng.uniform(0.0, 0.5))
        self._work.broker.start()

    def cut_connections(self) -> None:
        """All but this one."""
        run_sql(
            "SELECT pg_terminate_backend(pid) FROM pg_stat_activity"
            " WHERE datname = current_database() AND pid <> pg_backend_pid()"
        )
        connection.close()


def _kill(pid: int) -> None:
    with suppress(ProcessLookupError):
        os.kill(pid, signal.SIGKILL)
