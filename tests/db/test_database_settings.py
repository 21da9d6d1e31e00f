"""What the open connection really runs under: options at the wrong level are silently ignored."""

import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from django.core.exceptions import ImproperlyConfigured
from django.db import IntegrityError, OperationalError, connection, transaction

from inventory.models import Balance, Movement
from labplan.base.problems import is_lock_timeout
from labplan.settings.database import database_from_url
from tests.db.bench import ON_POSTGRESQL, at_once, insert, make_shelf, rows_of, run_sql


def _value(sql: str) -> Any:
    return rows_of(sql)[0][0]


@pytest.mark.django_db
def test_the_open_connection_waits_its_turn_and_no_longer() -> None:
    if ON_POSTGRESQL:
        assert _value("SHOW lock_timeout") == "3s"
        assert _value("SHOW transaction_isolation") == "read committed"
    else:
        assert _value("PRAGMA busy_timeout") == 20_000
        assert _value("PRAGMA journal_mode") == "wal"
        assert _value("PRAGMA recursive_triggers") == 1
        assert _value("PRAGMA foreign_keys") == 1
        assert connection.settings_dict["OPTIONS"]["transaction_mode"] == "IMMEDIATE"


@pytest.mark.django_db(transaction=True)
def test_a_connection_of_another_thread_has_the_same_settings() -> None:
    if ON_POSTGRESQL:
        assert at_once(lambda: _value("SHOW lock_timeout")) == ["3s"]
    else:
        names = ("busy_timeout", "journal_mode", "recursive_triggers", "foreign_keys")
        [found] = at_once(lambda: [_value(f"PRAGMA {name}") for name in names])
        assert found == [20_000, "wal", 1, 1]


@pytest.mark.django_db
def test_a_row_that_points_at_nothing_is_refused() -> None:
    def balance_of_nothing() -> None:
        insert("inventory_balance", {"bottle_id": 404, "on_hand": 0, "held": 0, "seq": 0})
        connection.check_constraints()

    with pytest.raises(IntegrityError), transaction.atomic():
        balance_of_nothing()
    assert Balance.objects.count() == 0


@pytest.mark.django_db(transaction=True)
def test_a_transaction_takes_the_writers_place_at_its_start_or_locks_only_rows() -> None:
    """SQLite: a second writer waits at BEGIN. PostgreSQL: it passes, unless it wants the same."""
    make_shelf(A=100_000, B=100_000)
    first, second = Balance.objects.order_by("pk").values_list("pk", flat=True)

    def other(pk: int) -> str:
        with transaction.atomic():
            if ON_POSTGRESQL:
                run_sql("SET LOCAL lock_timeout = '200ms'")
            run_sql("UPDATE inventory_balance SET on_hand = on_hand WHERE bottle_id = %s", [pk])
        return "written"

    def hurried(pk: int) -> str:
        if not ON_POSTGRESQL:
            run_sql("PRAGMA busy_timeout = 200")
        return other(pk)

    with transaction.atomic():
        run_sql("UPDATE inventory_balance SET on_hand = on_hand WHERE bottle_id = %s", [first])
        [same] = at_once(lambda: hurried(first))
        [another] = at_once(lambda: hurried(second))
    assert isinstance(same, OperationalError)
    assert is_lock_timeout(same)
    if ON_POSTGRESQL:
        assert another == "written"
    else:
        assert isinstance(another, OperationalError)
        assert is_lock_timeout(another)
    assert at_once(lambda: other(first)) == ["written"]
    assert Movement.objects.count() == 2


def test_an_unknown_database_address_is_refused() -> None:
    for url in ("mysql://x/y", "sqlite://relative", "labplan.sqlite3"):
        with pytest.raises(ImproperlyConfigured, match="DATABASE_URL must start with"):
            database_from_url(url)


def test_percent_signs_and_options_of_an_address_are_kept() -> None:
    made = database_from_url("postgresql://u:p%40ss@/lab?host=%2Frun%2Fpg&options=-c%20a.b%3D1")
    assert (made["NAME"], made["USER"], made["PASSWORD"]) == ("lab", "u", "p@ss")
    assert made["HOST"] == "/run/pg"
    assert made["OPTIONS"]["options"] == "-c a.b=1 -c lock_timeout=3000"
    assert database_from_url("sqlite:////tmp/a%20b.sqlite3")["NAME"] == "/tmp/a b.sqlite3"


@pytest.mark.parametrize("ends", ["pass", "raise SystemExit(3)", "os.fork() or os._exit(0)"])
def test_a_process_on_the_test_settings_leaves_no_database_behind(
    ends: str, tmp_path: Path
) -> None:
    """Also when it fails, and when a child of it ends first."""
    program = (
        "import os, pathlib, tempfile, django; django.setup()\n"
        "from django.db import connection as c\n"
        "c.cursor().execute('CREATE TABLE kept (id INTEGER)'); c.close()\n"
        "assert list(pathlib.Path(tempfile.gettempdir()).glob('labplan-test-*/*.sqlite3*'))\n"
    )
    environment = {**os.environ, "TMPDIR": str(tmp_path),
                   "DJANGO_SETTINGS_MODULE": "labplan.settings.test"}  # fmt: skip
    environment.pop("DATABASE_URL", None)
    ended = subprocess.run(
        [sys.executable, "-c", program + ends], cwd=Path(__file__).resolve().parents[2],
        env=environment, capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert ended.returncode == (3 if "3" in ends else 0), ended.stderr
    assert list(tmp_path.iterdir()) == []
