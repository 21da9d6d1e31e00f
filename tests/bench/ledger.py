"""How long it takes to seal and to check a large ledger, and how much memory.

python -m tests.bench.ledger MOVEMENTS [--postgresql]

Each bottle has 1,000 lines, written bottle after bottle as a laboratory does, so that the lines of
one bottle lie far apart; every ten of them are sealed by a run. The same is done on a tenth of
it, to show that memory does not grow with the movements. Checking is done by a process of its own.
"""

import argparse
import contextlib
import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from typing import Any

from rich.console import Console
from rich.table import Table

LINES = 1_000  # of each bottle
SEALED_AFTER = 10  # lines of each bottle
FIRST_UG, STEP_UG = 10**9, 10


def _set_up() -> None:
    os.environ["DJANGO_SETTINGS_MODULE"] = "labplan.settings.default"
    import django

    django.setup()


def fill(movements: int) -> float:
    """An empty database with so many movements, sealed; returns the seconds that sealing took."""
    from django.core.management import call_command
    from django.db import connection, transaction

    from inventory.models import Balance, Bottle, Movement
    from inventory.services.book import BookLine, write_lines
    from labplan.base.seal import seal_new
    from tests.db.bench import make_shelf

    call_command("migrate", verbosity=0)
    shelf = make_shelf(TEMPLATE=FIRST_UG)
    template = shelf.bottle("TEMPLATE")
    with transaction.atomic():
        line = BookLine(
            template.pk, "use", on_hand_change=-STEP_UG, entered_amount="0.01", entered_unit="mg"
        )
        write_lines(
            [line], actor=shelf.actor(), project_id=shelf.project.pk, reason="a measurement"
        )
    numbers = range(max(1, movements // LINES))
    bottles = Bottle.objects.bulk_create(_copies(template, numbers), batch_size=500)
    Balance.objects.bulk_create([Balance(bottle=b) for b in bottles], batch_size=500)
    sealing_s = 0.0
    for seq in range(1, LINES + 1):
        with transaction.atomic(), connection.cursor() as cursor:
            cursor.execute(*_one_line_each(template.pk, seq))
        if seq % SEALED_AFTER == 0:
            started = time.perf_counter()
            seal_new()
            sealing_s += time.perf_counter() - started
    with transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(
            "UPDATE inventory_balance SET seq = %s, on_hand = %s WHERE bottle_id <> %s",
            [LINES, FIRST_UG - (LINES - 1) * STEP_UG, template.pk],
        )
        if connection.vendor == "postgresql":
            cursor.execute("ANALYZE")
    assert Movement.objects.count() == len(bottles) * LINES + 2
    return sealing_s


def _copies(template: Any, numbers: range) -> Iterator[Any]:
    names = [f.attname for f in template._meta.concrete_fields if not f.primary_key]
    for number in numbers:
        values = {name: getattr(template, name) for name in names}
        yield type(template)(**{**values, "code": f"B{number}"})


def _one_line_each(template: int, seq: int) -> tuple[str, list[int]]:
    """One line of every bottle but the template, after the template's receipt or use."""
    from inventory.models import Movement

    on_hand = FIRST_UG - (seq - 1) * STEP_UG
    new = {"bottle_id": "b.bottle_id", "seq": "%s", "on_hand_after": "%s"}
    columns = [field.column for field in Movement._meta.concrete_fields if not field.primary_key]
    shown = ", ".join(new.get(column, f"t.{column}") for column in columns)
    values = [{"seq": seq, "on_hand_after": on_hand}[c] for c in columns if new.get(c) == "%s"]
    sql = (
        f"INSERT INTO inventory_movement ({', '.join(columns)}) SELECT {shown} "
        "FROM inventory_movement t CROSS JOIN inventory_balance b "
        "WHERE t.bottle_id = %s AND t.seq = %s AND b.bottle_id <> %s ORDER BY b.bottle_id"
    )
    return sql, [*values, template, min(seq, 2), template]


def check() -> dict[str, float]:
    """verify_ledger beside bare reading of the same rows; peak memory of this process."""
    from inventory.models import Movement
    from inventory.services.verify import verify_ledger
    from labplan.base.seal.registry import get_book
    from labplan.base.seal.rows import RowReader
    from labplan.base.steady import steady_view

    started = time.perf_counter()
    with steady_view():
        rows = sum(1 for _ in RowReader(get_book("stock"), b"").all_rows())
    reading_s = time.perf_counter() - started
    before_mb = _peak_mb()
    started = time.perf_counter()
    report = verify_ledger()
    checking_s = time.perf_counter() - started
    assert report.faults == (), report.faults[:3]
    assert report.movements == rows == Movement.objects.count()
    return {
        "movements": rows, "sealed": report.sealed_rows, "seals": report.seals,
        "reading_s": reading_s, "checking_s": checking_s, "before_mb": before_mb,
        "peak_mb": _peak_mb(),
    }  # fmt: skip


def _peak_mb() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


@contextlib.contextmanager
def _database(on_postgresql: bool) -> Iterator[dict[str, str]]:
    """The environment of an empty database of its own, thrown away afterwards."""
    plain = {name: value for name, value in os.environ.items() if name != "DATABASE_URL"}
    with tempfile.TemporaryDirectory(prefix="labplan-bench-") as folder:
        plain["LABPLAN_DATA_DIR"] = folder
        if not on_postgresql:
            yield plain
            return
        from tests.services.postgres import running_postgres

        with running_postgres() as address:
            yield {**plain, "DATABASE_URL": address}


def _run(part: str, movements: int, environment: dict[str, str]) -> dict[str, float]:
    ended = subprocess.run(
        [sys.executable, "-m", "tests.bench.ledger", str(movements), "--part", part],
        env=environment, capture_output=True, text=True, check=False,
    )  # fmt: skip
    if ended.returncode:
        raise SystemExit(ended.stderr)
    found: dict[str, float] = json.loads(ended.stdout.splitlines()[-1])
    return found


def measure(movements: int, *, on_postgresql: bool) -> Table:
    """A row for a tenth of the movements and one for all of them."""
    where = "PostgreSQL" if on_postgresql else "SQLite"
    table = Table(
        "movements", "seals", "sealing", "bare reading", "verify_ledger", "ratio", "peak",
        title=f"A ledger of {LINES:,} lines a bottle, sealed every {SEALED_AFTER}, on {where}",
    )  # fmt: skip
    for size in (movements // 10, movements):
        with _database(on_postgresql) as environment:
            sealing_s = _run("fill", size, environment)["sealing_s"]
            found = _run("check", size, environment)
        rows = found["movements"]
        table.add_row(
            f"{rows:,.0f}", f"{found['seals']:.0f}", f"{rows / sealing_s:,.0f}/s",
            f"{rows / found['reading_s']:,.0f}/s",
            f"{rows / found['checking_s']:,.0f}/s, {found['checking_s']:.0f} s",
            f"{found['checking_s'] / found['reading_s']:.1f}",
            f"{found['before_mb']:.0f} -> {found['peak_mb']:.0f} MB",
        )  # fmt: skip
    return table


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("movements", type=int)
    parser.add_argument("--postgresql", action="store_true")
    parser.add_argument("--part", choices=["fill", "check"], help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.part is None:
        Console(width=110).print(measure(options.movements, on_postgresql=options.postgresql))
        return
    _set_up()
    if options.part == "fill":
        print(json.dumps({"sealing_s": fill(options.movements)}))
    else:
        print(json.dumps(check()))


if __name__ == "__main__":
    main()
