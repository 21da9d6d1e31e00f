"""How fast queued requests are planned by real workers on PostgreSQL, and what waiting costs.

python -m tests.bench.workers    prints one JSON object; `make bench` shows it as a table
"""

import csv
import json
import os
import statistics
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from decimal import Decimal
from pathlib import Path
from typing import Any

REQUESTS, RUNS, SINGLES = 400, 5, 40
# Enough of everything for all requests of a run.
TIMES_THE_STOCK = 200
IDLE_LIMIT_S = 0.05


def main() -> None:
    from tests.services.postgres import running_postgres

    os.environ["DJANGO_SETTINGS_MODULE"] = "labplan.settings.test"
    if "--here" not in sys.argv:
        with running_postgres() as address:
            environment = {**os.environ, "DATABASE_URL": address}
            subprocess.run(
                [sys.executable, "-m", "tests.bench.workers", "--here"], check=True,
                env=environment,
            )  # fmt: skip
        return
    import django

    django.setup()
    from django.core.management import call_command

    call_command("migrate", verbosity=0)
    print(json.dumps(measure()))


def measure() -> dict[str, Any]:
    """Seconds for the queued requests with one worker and with two; latency beside bare work."""
    from tests.services.clocked import moved_by, offset_to
    from tests.simulation.test_chaos import NOON

    moved_by(offset_to(NOON))
    fill()
    one, two = [], []
    with watching_idle_transactions() as idle:
        for _ in range(RUNS):
            two.append(seconds_for(REQUESTS, workers=2))
            one.append(seconds_for(REQUESTS, workers=1))
    bare_ms, latency_ms = latencies()
    return {
        "one_s": one, "two_s": two,
        "ratio": statistics.median(a / b for a, b in zip(one, two, strict=True)),
        "longest_idle_in_transaction_ms": max(idle, default=0.0) * 1000,
        "bare_ms": statistics.median(bare_ms), "latency_ms": statistics.median(latency_ms),
        "latency_p90_ms": statistics.quantiles(latency_ms, n=10)[-1],
    }  # fmt: skip


def fill() -> None:
    """The demo's laboratory with far larger bottles."""
    from inventory.services import import_stock
    from labplan.procedures.demo import scenario as demo

    demo.load_people(demo.read_scenario())
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "stock.csv"
        with (demo.FOLDER / "stock.csv").open(encoding="utf-8") as file:
            rows = list(csv.DictReader(file))
        for row in rows:
            row["amount"] = str(Decimal(row["amount"]) * TIMES_THE_STOCK)
        with path.open("w", encoding="utf-8", newline="") as file:
            writer = csv.DictWriter(file, list(rows[0]))
            writer.writeheader()
            writer.writerows(rows)
        import_stock(
            actor=demo.actor_of("JONAS"), bottles_file=path, places_file=demo.FOLDER / "places.csv"
        )


def ask(number: int) -> list[Any]:
    from labplan.procedures.demo.scenario import actor_of
    from labplan.procedures.services import ProcedureOrder, request_procedure
    from tests.targets import OCTYL_GLUCOSIDE

    actor = actor_of("MIRA")
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(100))
    return [request_procedure(actor=actor, order=order) for _ in range(number)]


def queued() -> bool:
    from labplan.procedures.models import Procedure

    return Procedure.objects.filter(state="queued").exists()


def seconds_for(number: int, *, workers: int) -> float:
    """From the first message out to the last procedure planned; workers warm, no web."""
    from labplan.base import outbox
    from labplan.procedures.models import Procedure
    from tests.services.live_work import live_work
    from tests.simulation.test_chaos import NOON

    with live_work(NOON, workers=workers, limit_s=30) as work, nudging(work):
        ask(2 * workers)
        work.until(lambda: not queued())
        outbox.pause("all are queued first")
        ask(number)
        outbox.resume()
        started = time.perf_counter()
        until(lambda: not queued())
        took = time.perf_counter() - started
    states = set(Procedure.objects.values_list("state", flat=True))
    assert states == {"planned"}, states
    return took


def until(is_so: Callable[[], bool]) -> None:
    while not is_so():
        time.sleep(0.01)


@contextmanager
def nudging(work: Any) -> Iterator[None]:
    """Have this process tell the relay, as a web process does."""
    from django.conf import settings

    from labplan.base import broker

    broker.client.cache_clear()  # it may know the address of an earlier broker
    settings.BROKER_URL = work.broker.address
    try:
        yield
    finally:
        settings.BROKER_URL = ""


def latencies() -> tuple[list[float], list[float]]:
    """Of single requests on an idle house [ms]: planning alone, here; from request to planned."""
    from labplan.base import outbox
    from labplan.procedures.models import Procedure
    from tests.services.live_work import live_work
    from tests.simulation.test_chaos import NOON

    bare, whole = [], []
    for _ in range(SINGLES):
        ask(1)
        started = time.perf_counter()
        assert outbox.deliver_waiting() == 1
        bare.append((time.perf_counter() - started) * 1000)
    with live_work(NOON, workers=2, limit_s=30) as work, nudging(work):
        ask(4)
        work.until(lambda: not queued())
        for _ in range(SINGLES):
            time.sleep(0.1)
            [procedure] = ask(1)
            until(lambda: not queued())
            procedure = Procedure.objects.get(pk=procedure.pk)
            whole.append((procedure.settled_at - procedure.created_at).total_seconds() * 1000)
    return bare, whole


@contextmanager
def watching_idle_transactions() -> Iterator[list[float]]:
    """Look every few milliseconds for connections idle in a transaction; their ages over 50 ms."""
    import psycopg

    found: list[float] = []
    stop = threading.Event()

    def look() -> None:
        with psycopg.connect(os.environ["DATABASE_URL"], autocommit=True) as connection:
            while not stop.wait(0.01):
                rows = connection.execute(
                    "SELECT extract(epoch FROM clock_timestamp() - state_change)::float"
                    " FROM pg_stat_activity WHERE state LIKE 'idle in transaction%'"
                ).fetchall()
                found.extend(age for (age,) in rows if age > IDLE_LIMIT_S)

    thread = threading.Thread(target=look)
    thread.start()
    try:
        yield found
    finally:
        stop.set()
        thread.join()


if __name__ == "__main__":
    main()
