"""What happens, counted: with Prometheus' client, over all processes of a machine.

With PROMETHEUS_MULTIPROC_DIR each process counts in files of its own there, and the endpoint adds
them up; without it, or when that folder cannot be used, each process counts for itself. Counting
never stops the work that is counted.
"""

import logging
import os
import tempfile
import time
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

logger = logging.getLogger(__name__)
FOLDER_VARIABLE = "PROMETHEUS_MULTIPROC_DIR"


def _usable_folder() -> Path | None:
    """The folder given, made if need be; None when there is none to use, which the log says."""
    given = os.environ.get(FOLDER_VARIABLE)
    if not given:
        os.environ.pop(FOLDER_VARIABLE, None)  # an empty one would be taken for a folder
        return None
    try:
        folder = Path(given).resolve()
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            pass
    except OSError as error:
        logger.warning(
            "metrics: the folder of %s cannot be used (%s); each process counts for itself",
            FOLDER_VARIABLE, type(error).__name__,
        )  # fmt: skip
        # The client reads the variable when it is imported and fails without the folder.
        del os.environ[FOLDER_VARIABLE]
        return None
    os.environ[FOLDER_VARIABLE] = str(folder)  # wherever this process goes
    return folder


FOLDER = _usable_folder()

from prometheus_client import (  # noqa: E402
    CollectorRegistry,
    Counter,
    Histogram,
    Metric,
    disable_created_metrics,
    values,
)
from prometheus_client.multiprocess import MultiProcessCollector  # noqa: E402
from prometheus_client.registry import Collector  # noqa: E402

from labplan.base import metrics_files  # noqa: E402

if FOLDER:
    values.ValueClass = values.MultiProcessValue(metrics_files.name_of_this_process)
disable_created_metrics()  # the files of several processes have none either
REGISTRY = CollectorRegistry()

_METHODS = frozenset({"GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS"})
_REQUEST_BUCKETS_S = (0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1, 2.5, 5, 10)
_RUN_BUCKETS_S = (0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1, 2.5, 5, 10, 30, 60, 120)
COMPLAIN_EVERY_S = 60.0
_complained_at = float("-inf")


def counter(name: str, text: str, labels: tuple[str, ...]) -> Counter:
    """A counter `labplan_<name>_total`."""
    return Counter(name, text, labels, namespace="labplan", registry=REGISTRY)


def duration(name: str, text: str, labels: tuple[str, ...], buckets_s: tuple[float, ...]) -> Any:
    """A histogram `labplan_<name>_seconds`."""
    return Histogram(
        f"{name}_seconds", text, labels, namespace="labplan", registry=REGISTRY, buckets=buckets_s
    )


_requests = counter("http_requests", "Requests answered.", ("route", "method", "status"))
_request_durations = duration(
    "http_request_duration", "How long requests took.", ("route", "method"), _REQUEST_BUCKETS_S
)
_runs = counter("outbox_runs", "Runs of outbox messages that ended.", ("topic", "outcome"))
_run_durations = duration(
    "outbox_run_duration", "How long runs of outbox messages took.", ("topic",), _RUN_BUCKETS_S
)
_sweeps = counter("sweeps", "Sweeps that ended: done or failed.", ("sweep", "outcome"))
_swept = counter("sweep_found", "What sweeps found to do.", ("sweep",))


def never_in_the_way(count: Callable[..., None]) -> Callable[..., None]:
    """A count that fails (folder gone, disk full) is said in the log now and then, no more."""

    @wraps(count)
    def counted(*args: Any, **kwargs: Any) -> None:
        global _complained_at  # noqa: PLW0603 - one complaint a minute and process
        try:
            count(*args, **kwargs)
        except Exception as error:
            if time.monotonic() - _complained_at >= COMPLAIN_EVERY_S:
                _complained_at = time.monotonic()
                logger.warning("metrics: not counted: %s: %s", type(error).__name__, error)

    return counted


@never_in_the_way
def count_request(route: str, method: str, status: int, duration_s: float) -> None:
    method = method if method in _METHODS else "other"  # callers must not make up series
    _requests.labels(route, method, str(status)).inc()
    _request_durations.labels(route, method).observe(duration_s)


@never_in_the_way
def count_run(topic: str, outcome: str, duration_s: float) -> None:
    _runs.labels(topic, outcome).inc()
    _run_durations.labels(topic).observe(duration_s)


@never_in_the_way
def count_sweep(sweep: str, outcome: str, found: int = 0) -> None:
    _sweeps.labels(sweep, outcome).inc()
    _swept.labels(sweep).inc(found)


@never_in_the_way
def fold_dead() -> None:
    """Keep the counts of processes that have died and let go of their files."""
    if FOLDER:
        metrics_files.fold_dead(FOLDER)


def registry_of_all() -> CollectorRegistry:
    """A new registry of what all processes have counted, to which the reader may add."""
    registry = CollectorRegistry()
    registry.register(_AllProcesses() if FOLDER else REGISTRY)
    return registry


class _AllProcesses(Collector):
    """Reads the folder; one that cannot be read is said in the log and shows no counts."""

    def collect(self) -> list[Metric]:
        assert FOLDER is not None
        fold_dead()
        try:
            with metrics_files.locked(FOLDER):
                return list(MultiProcessCollector.merge(metrics_files.begun(FOLDER)))
        except Exception as error:
            logger.warning("metrics: no counts: %s: %s", type(error).__name__, error)
            return []
