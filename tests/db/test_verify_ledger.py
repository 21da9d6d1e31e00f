"""The check of the books finds what was changed behind the services, and says where."""

import io
import os
import subprocess
import sys
import uuid
from pathlib import Path

import pytest
from django.core.management import CommandError, call_command
from django.db import DatabaseError, connection, transaction

from inventory.models import Movement
from inventory.services.verify import LedgerFault, verify_ledger
from labplan.base import append_only
from tests.db.bench import (
    ON_POSTGRESQL,
    Shelf,
    database_address,
    drop_trigger,
    insert,
    make_shelf,
    run_sql,
)

ROOT = Path(__file__).resolve().parents[2]
SPOILS = pytest.mark.spoils_the_book
# bottle A: 1 receipt 100,000; 2 hold 30,000; 3 hold 5,000. Bottle B: 1 receipt 100,000


@pytest.fixture
def shelf(db: None) -> Shelf:
    shelf = make_shelf(A=100_000, B=100_000)
    shelf.hold(("A", 30_000))
    shelf.hold(("A", 5_000))
    return shelf


def _tamper(sql: str) -> None:
    """Change the rows as somebody with the rights of the database's owner could."""
    if ON_POSTGRESQL:
        run_sql("SET CONSTRAINTS ALL IMMEDIATE")
    with append_only.lifted(connection):
        run_sql(sql)


def _of(shelf: Shelf, code: str) -> str:
    return f"bottle_id = {shelf.bottle(code).pk}"


def test_a_sound_stock_has_no_faults_and_is_counted(shelf: Shelf) -> None:
    report = verify_ledger()
    assert (report.bottles, report.movements, report.faults) == (2, 4, ())


def test_an_empty_stock_has_nothing_to_find(db: None) -> None:
    report = verify_ledger()
    assert (report.bottles, report.movements, report.faults) == (0, 0, ())


@SPOILS
def test_a_changed_balance_is_found(shelf: Shelf) -> None:
    _tamper(f"UPDATE inventory_balance SET on_hand = 99999 WHERE {_of(shelf, 'B')}")
    assert verify_ledger().faults == (
        LedgerFault(
            "B", "balance",
            "says seq 1, 99999 on hand, 0 held; the book says seq 1, 100000 on hand, 0 held",
        ),
    )  # fmt: skip


@SPOILS
def test_an_amount_held_by_nobody_is_found_twice(shelf: Shelf) -> None:
    _tamper(f"UPDATE inventory_balance SET held = 36000 WHERE {_of(shelf, 'A')}")
    assert verify_ledger().faults == (
        LedgerFault(
            "A", "balance",
            "says seq 3, 100000 on hand, 36000 held; the book says seq 3, 100000 on hand, "
            "35000 held",
        ),
        LedgerFault("A", "holds", "the balance says 36000 held, the open holds are 35000"),
    )  # fmt: skip


@SPOILS
def test_a_changed_sum_is_found_in_its_line_only(shelf: Shelf) -> None:
    _tamper(f"UPDATE inventory_movement SET held_after = 29999 WHERE seq = 2 AND {_of(shelf, 'A')}")
    assert verify_ledger().faults == (
        LedgerFault("A", "line 2", "says 29999 held, the sum is 30000"),
    )


@SPOILS
def test_a_changed_amount_is_found_from_its_line_on(shelf: Shelf) -> None:
    _tamper(
        f"UPDATE inventory_movement SET on_hand_change = 90000 WHERE seq = 1 AND {_of(shelf, 'A')}"
    )
    found = [(fault.bottle, fault.where) for fault in verify_ledger().faults]
    assert found == [("A", "line 1"), ("A", "line 2"), ("A", "line 3"), ("A", "balance")]
    assert verify_ledger().faults[0].detail == "says 100000 on hand, the sum is 90000"


@SPOILS
def test_a_line_taken_out_of_the_middle_is_found(shelf: Shelf) -> None:
    _tamper(f"DELETE FROM inventory_movement WHERE seq = 2 AND {_of(shelf, 'A')}")
    faults = verify_ledger().faults
    assert faults[0] == LedgerFault("A", "line 3", "follows line 1: lines are missing")
    assert faults[1] == LedgerFault("A", "line 3", "says 35000 held, the sum is 5000")
    assert [fault.where for fault in faults[2:]] == ["balance"]


@SPOILS
@pytest.mark.parametrize(("seq", "where"), [(1, "line 2"), (3, "balance")])
def test_a_line_taken_from_an_end_is_found(shelf: Shelf, seq: int, where: str) -> None:
    _tamper(f"DELETE FROM inventory_movement WHERE seq = {seq} AND {_of(shelf, 'A')}")
    faults = verify_ledger().faults
    assert (faults[0].bottle, faults[0].where) == ("A", where)
    assert {fault.bottle for fault in faults} == {"A"}


@SPOILS
def test_a_line_put_in_behind_the_balance_is_found(shelf: Shelf) -> None:
    row = Movement.objects.filter(bottle__code="B").values().get()
    row |= {"id": 10**6, "seq": 2, "on_hand_change": 5, "on_hand_after": 100_005}
    row["operation"] = uuid.uuid4().hex
    insert("inventory_movement", row)
    assert verify_ledger().faults == (
        LedgerFault(
            "B", "balance",
            "says seq 1, 100000 on hand, 0 held; the book says seq 2, 100005 on hand, 0 held",
        ),
    )  # fmt: skip


@SPOILS
def test_a_hold_closed_without_a_line_is_found(shelf: Shelf) -> None:
    _tamper("UPDATE inventory_hold SET state = 'released', given_back = 5000 WHERE amount = 5000")
    assert verify_ledger().faults == (
        LedgerFault("A", "holds", "the balance says 35000 held, the open holds are 30000"),
    )


@SPOILS
def test_a_book_without_its_balance_is_found(shelf: Shelf) -> None:
    _tamper(f"DELETE FROM inventory_balance WHERE {_of(shelf, 'B')}")
    report = verify_ledger()
    assert report.faults == (LedgerFault("B", "balance", "is missing, but the bottle has a book"),)
    assert (report.bottles, report.movements) == (1, 4)


@SPOILS
def test_faults_of_several_bottles_are_all_told(shelf: Shelf) -> None:
    _tamper("UPDATE inventory_balance SET seq = seq + 1")
    assert [fault.bottle for fault in verify_ledger().faults] == ["A", "B"]


def test_the_trigger_alone_already_refuses_what_the_check_would_find(shelf: Shelf) -> None:
    drop_trigger("inventory_movement", "inventory_movement_carries_on")
    append_only.install_all(using="default")
    row = Movement.objects.filter(bottle__code="B").values().get()
    row |= {"id": 10**6, "seq": 3, "operation": row["operation"].hex}
    with pytest.raises(DatabaseError, match="does not carry on"), transaction.atomic():
        insert("inventory_movement", row)


def test_the_command_counts_and_says_that_all_is_well(shelf: Shelf) -> None:
    said, complained = io.StringIO(), io.StringIO()
    call_command("verify_ledger", stdout=said, stderr=complained)
    assert said.getvalue() == (
        "2 bottles, 4 movements: every book adds up.\n"
        "No seals yet: 4 rows wait for 'manage.py seal'.\n"
    )
    assert complained.getvalue() == ""


@SPOILS
def test_the_command_names_each_fault_and_fails(shelf: Shelf) -> None:
    _tamper(f"UPDATE inventory_movement SET held_after = 29999 WHERE seq = 2 AND {_of(shelf, 'A')}")
    said, complained = io.StringIO(), io.StringIO()
    with pytest.raises(CommandError) as failed:
        call_command("verify_ledger", stdout=said, stderr=complained)
    assert str(failed.value) == "2 bottles, 4 movements: 1 fault(s)."
    assert failed.value.returncode == 1
    assert complained.getvalue() == "A, line 2: says 29999 held, the sum is 30000\n"
    assert said.getvalue() == ""


@SPOILS
@pytest.mark.django_db(transaction=True)
def test_the_exit_code_tells_a_script() -> None:
    shelf = make_shelf(A=100_000)
    clean = _run_command()
    assert clean.returncode == 0
    assert clean.stdout.splitlines()[0] == "1 bottles, 1 movements: every book adds up."
    _tamper(f"UPDATE inventory_balance SET on_hand = 99999 WHERE {_of(shelf, 'A')}")
    spoilt = _run_command()
    assert (spoilt.returncode, spoilt.stdout) == (1, "")
    assert "A, balance: says seq 1, 99999 on hand" in spoilt.stderr
    assert "1 bottles, 1 movements: 1 fault(s)." in spoilt.stderr


def _run_command() -> subprocess.CompletedProcess[str]:
    environment = {
        **os.environ,
        "DATABASE_URL": database_address(),
        "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }
    return subprocess.run(
        [sys.executable, "manage.py", "verify_ledger"],
        cwd=ROOT, env=environment, capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
