"""Work that is done every so often: each app says what and how often, the scheduler says when.

Every duty is a sweep that looks for what is due, so that a run that is missed, doubled or cut
short loses nothing: the next one finds it.
"""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta

from labplan.base import metrics


@dataclass(frozen=True)
class Duty:
    """A sweep; it returns how much it found to do."""

    run: Callable[[], int]
    every: timedelta


_duties: dict[str, Duty] = {}


def sweeps(name: str, *, every: timedelta) -> Callable[[Callable[[], int]], Callable[[], int]]:
    """Register a sweep to be run again and again."""

    def register(run: Callable[[], int]) -> Callable[[], int]:
        _duties[name] = Duty(run, every)
        return run

    return register


def duties() -> dict[str, Duty]:
    return dict(_duties)


def run_duty(name: str) -> int:
    """Run one sweep now; KeyError for a name that is not registered."""
    duty = _duties[name]
    try:
        found = duty.run()
    except Exception:
        metrics.count_sweep(name, "failed")
        raise
    metrics.count_sweep(name, "done", found)
    return found
