"""A reservation of five lines beside the same rows written by one server function.

`rows()` starts a PostgreSQL and a SQLite of its own and runs this module as a program on each;
`measure` forks clients before a connection is open.
"""

import json
import os
import random
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

LINES = 5
SECONDS = float(os.environ.get("LABPLAN_BENCH_SECONDS", "4"))
BOTTLES = 200
HOT = 8
PLENTY_UG = 10**14
# Everything that a hold of five lines writes, in one round trip.
FUNCTION = """
CREATE OR REPLACE FUNCTION bench_reserve(
    project bigint, bottles bigint[], amounts bigint[], at timestamptz
) RETURNS bigint LANGUAGE plpgsql AS $$
DECLARE made bigint; operation uuid := gen_random_uuid(); moved int;
BEGIN
  INSERT INTO inventory_reservation
    (code, project_id, actor_code, purpose, state, is_firm, expires_on, created_at, version)
    VALUES (gen_random_uuid(), project, 'LEAD', 'a measurement', 'open', false, at::date + 14,
            at, 1)
    RETURNING id INTO made;
  INSERT INTO inventory_hold (reservation_id, line, bottle_id, amount, used, given_back, state)
    SELECT made, n, b, a, 0, 0, 'open' FROM unnest(bottles, amounts) WITH ORDINALITY AS t(b, a, n);
  PERFORM 1 FROM inventory_balance WHERE bottle_id = ANY(bottles)
    ORDER BY bottle_id FOR NO KEY UPDATE;
  UPDATE inventory_balance SET held = held + t.a, seq = seq + 1
    FROM unnest(bottles, amounts) AS t(b, a), inventory_bottle bottle
    WHERE inventory_balance.bottle_id = t.b AND bottle.id = t.b
      AND inventory_balance.on_hand - inventory_balance.held - t.a >= bottle.heel;
  GET DIAGNOSTICS moved = ROW_COUNT;
  IF moved < cardinality(bottles) THEN RAISE EXCEPTION 'too little'; END IF;
  INSERT INTO inventory_movement
    (bottle_id, seq, kind, on_hand_change, held_change, on_hand_after, held_after, entered_amount,
     entered_unit, density_source, hold_id, operation, part, project_id, actor_code, reason,
     booked_on, recorded_at)
    SELECT h.bottle_id, c.seq, 'hold', 0, h.amount, c.on_hand, c.held, h.amount::text, 'ug', '',
           h.id, operation, h.line, project, 'LEAD', 'a measurement', at::date, at
    FROM inventory_hold h JOIN inventory_balance c ON c.bottle_id = h.bottle_id
    WHERE h.reservation_id = made;
  RETURN made;
END $$
"""


def rows() -> list[tuple[str, str, str, str, str]]:
    """(measured, figure, beside it, figure, ratio), for the table of the bench."""
    from tests.services.postgres import running_postgres

    found = []
    with running_postgres() as address:
        result = _run(address)
        for name in ("spread", "hot"):
            ours, bare = result[f"service {name}"], result[f"function {name}"]
            found.append(
                (
                    f"reservation of {LINES} lines, {name}, 4 clients", f"{ours['rate']:.0f}/s",
                    "one server function, same rows", f"{bare['rate']:.0f}/s",
                    f"{ours['rate'] / bare['rate']:.2f}",
                )
            )  # fmt: skip
        ours, bare = result["service hot, 8"], result["function hot, 8"]
        found.append(
            (
                "its p99, hot, 8 clients", f"{ours['p99_ms']:.1f} ms",
                "one server function, same rows", f"{bare['p99_ms']:.1f} ms",
                f"{ours['p99_ms'] / bare['p99_ms']:.1f}",
            )
        )  # fmt: skip
    with tempfile.TemporaryDirectory(prefix="labplan-bench-") as folder:
        result = _run(f"sqlite:///{Path(folder, 'bench.sqlite3')}")
    ours = result["service hot, 8"]
    found.append(
        (
            "the same on SQLite, hot, 8 clients", f"{ours['rate']:.0f}/s", "its longest wait",
            f"{ours['longest_ms']:.0f} ms", "",
        )
    )  # fmt: skip
    return found


def _run(address: str) -> dict[str, dict[str, float]]:
    environment = {
        **os.environ, "DATABASE_URL": address, "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }  # fmt: skip
    ended = subprocess.run(
        [sys.executable, "-m", "tests.bench.reservations"], env=environment, capture_output=True,
        text=True, check=False,
    )  # fmt: skip
    if ended.returncode:
        sys.exit(ended.stderr)
    result: dict[str, dict[str, float]] = json.loads(ended.stdout.splitlines()[-1])
    return result


def measure() -> dict[str, dict[str, float]]:
    import django

    django.setup()
    from django.core.management import call_command
    from django.db import connection, connections

    from tests.db.bench import make_shelf

    call_command("migrate", verbosity=0)
    make_shelf(**{f"B{number:03d}": PLENTY_UG for number in range(BOTTLES)})
    on_postgresql = connection.vendor == "postgresql"
    if on_postgresql:
        with connection.cursor() as cursor:
            cursor.execute(FUNCTION)
    connections.close_all()
    found = {}
    ways: dict[str, Callable[[list[str]], Callable[[], None]]] = {"service": _service}
    if on_postgresql:
        ways["function"] = _function
    for name, bottles, clients in (("spread", BOTTLES, 4), ("hot", HOT, 4), ("hot, 8", HOT, 8)):
        for way, prepare in ways.items():
            found[f"{way} {name}"] = _clients(prepare, bottles, clients)
    return found


def _service(codes: list[str]) -> Callable[[], None]:
    from datetime import timedelta

    from django.db import transaction

    from inventory.services import HoldLine, hold_lines
    from labplan.base import clock
    from labplan.base.models import Person, Project
    from labplan.base.rights import actor_for

    actor, project = actor_for(Person.objects.get(code="LEAD")), Project.objects.get().pk
    until = clock.today() + timedelta(days=14)

    def once() -> None:
        lines = [HoldLine(code, 10, "10", "ug") for code in random.sample(codes, LINES)]
        with transaction.atomic(durable=True):
            hold_lines(
                actor=actor, project_id=project, purpose="a measurement", expires_on=until,
                operation="reservation.make", lines=lines,
            )  # fmt: skip

    return once


def _function(codes: list[str]) -> Callable[[], None]:
    from django.db import connection

    from inventory.models import Bottle
    from labplan.base import clock
    from labplan.base.models import Project

    keys = list(Bottle.objects.filter(code__in=codes).values_list("pk", flat=True))
    project = Project.objects.get().pk

    def once() -> None:
        with connection.cursor() as cursor:
            cursor.execute(
                "SELECT bench_reserve(%s, %s::bigint[], %s::bigint[], %s)",
                [project, random.sample(keys, LINES), [10] * LINES, clock.now()],
            )

    return once


def _clients(
    prepare: Callable[[list[str]], Callable[[], None]], bottles: int, clients: int
) -> dict[str, float]:
    """Fork clients that all begin at the same instant; their latencies together."""
    start, pipes = time.time() + 1.0, []
    for number in range(clients):
        reading, writing = os.pipe()
        if os.fork() == 0:
            os.close(reading)
            times = _client(prepare, bottles, number, start)
            with os.fdopen(writing, "w") as pipe:
                json.dump(times, pipe)
            os._exit(0)
        os.close(writing)
        pipes.append(reading)
    times_ms: list[float] = []
    for pipe in pipes:
        with os.fdopen(pipe) as file:
            times_ms += json.load(file)
        os.wait()
    return {
        "rate": len(times_ms) / SECONDS,
        "p99_ms": statistics.quantiles(times_ms, n=100)[98],
        "longest_ms": max(times_ms),
    }


def _client(
    prepare: Callable[[list[str]], Callable[[], None]], bottles: int, number: int, start: float
) -> list[float]:
    random.seed(number)
    once: Any = prepare([f"B{number:03d}" for number in range(bottles)])
    once()
    time.sleep(max(0.0, start - time.time()))
    times, end = [], time.perf_counter() + SECONDS
    while (began := time.perf_counter()) < end:
        once()
        times.append((time.perf_counter() - began) * 1000)
    return times


if __name__ == "__main__":
    print(json.dumps(measure()))
