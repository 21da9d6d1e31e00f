"""Balances are locked by one statement, in the order of their keys, before lines are written."""

import re
from collections.abc import Sequence
from datetime import date

import pytest
from django.db import connection, transaction
from django.test.utils import CaptureQueriesContext

from inventory import locks
from inventory.services import HoldLine, hold_lines, keep_still, release_reservation
from tests.db.bench import ON_POSTGRESQL, Shelf, make_shelf

pytestmark = pytest.mark.django_db
CODES = [f"B{number:02d}" for number in range(20)]


@pytest.fixture
def shelf() -> Shelf:
    return make_shelf(**dict.fromkeys(CODES, 100_000))


def _hold_statements(shelf: Shelf, codes: Sequence[str]) -> list[str]:
    """The SQL of one hold; who asks is read before, as in a request."""
    actor = shelf.actor()
    lines = [HoldLine(code, 1_000, "1", "mg") for code in codes]
    with CaptureQueriesContext(connection) as captured, transaction.atomic():
        hold_lines(
            actor=actor, project_id=shelf.project.pk, purpose="a test",
            expires_on=date(2026, 12, 15), lines=lines,
        )  # fmt: skip
    return [query["sql"] for query in captured.captured_queries]


def _only(statements: list[str], start: str) -> list[int]:
    return [n for n, sql in enumerate(statements) if re.match(start, sql.strip())]


def test_one_statement_locks_in_key_order_and_comes_before_the_lines(shelf: Shelf) -> None:
    statements = _hold_statements(shelf, list(reversed(CODES)))
    moving = _only(statements, r"WITH v\(bottle_id")
    assert len(moving) == 1
    sql = statements[moving[0]]
    lock = " FOR NO KEY UPDATE OF b" if ON_POSTGRESQL else ""
    assert f"ORDER BY b.bottle_id{lock}" in " ".join(sql.split())
    assert ("FOR NO KEY UPDATE" in sql) is ON_POSTGRESQL
    inserts = _only(statements, 'INSERT INTO "inventory_movement"')
    assert len(inserts) == 1
    assert moving[0] < inserts[0]
    assert _only(statements, 'UPDATE "inventory_balance"') == []
    quotas = [n for n, s in enumerate(statements) if "FROM inventory_quota" in s]
    assert len(quotas) == 1
    assert quotas < moving
    others = [n for n, s in enumerate(statements) if "FOR NO KEY UPDATE" in s or "FOR UPDATE" in s]
    assert others == (moving if ON_POSTGRESQL else [])


def test_the_rows_of_the_statement_are_sorted_by_key(shelf: Shelf) -> None:
    keys = [shelf.bottle(code).pk for code in reversed(CODES)]
    changes = [locks.BalanceChange(key, 0, 1, 1, 0) for key in keys]
    with CaptureQueriesContext(connection) as captured, transaction.atomic():
        after = locks.move_balances(changes)
        transaction.set_rollback(True)
    assert set(after) == set(keys)
    [sql] = [q["sql"] for q in captured.captured_queries if "WITH v" in q["sql"]]
    listed = [int(n) for n in re.findall(r"\((\d+)(?:::bigint)?, 0", sql)]
    assert listed == sorted(keys)


def test_more_lines_cost_no_more_statements(shelf: Shelf) -> None:
    one = len(_hold_statements(shelf, CODES[:1]))
    five = len(_hold_statements(shelf, CODES[:5]))
    twenty = len(_hold_statements(shelf, CODES))
    assert one == five == twenty
    assert one <= 8


def test_a_release_costs_the_same_for_one_line_and_for_twenty(shelf: Shelf) -> None:
    actor, counts = shelf.actor(), []
    for codes in (CODES[:1], CODES):
        reservation = shelf.hold(*[(code, 1_000) for code in codes])
        with CaptureQueriesContext(connection) as captured, transaction.atomic():
            release_reservation(actor=actor, code=reservation.code, reason="test")
        statements = [query["sql"] for query in captured.captured_queries]
        assert len(_only(statements, r"WITH v\(bottle_id")) == 1
        counts.append(len(statements))
    assert counts[0] == counts[1]


def test_still_rows_are_locked_in_key_order_by_one_statement(shelf: Shelf) -> None:
    with CaptureQueriesContext(connection) as captured, transaction.atomic():
        keep_still(list(reversed(CODES)))
    locking = [
        q["sql"] for q in captured.captured_queries if 'FROM "inventory_balance"' in q["sql"]
    ]
    assert len(locking) == 1
    assert re.search(r'ORDER BY (?:"inventory_balance"\."bottle_id"|1) ASC', locking[0])
    assert locking[0].rstrip().endswith("FOR NO KEY UPDATE") is ON_POSTGRESQL


@pytest.mark.django_db(transaction=True)
def test_locks_are_taken_in_a_transaction_only() -> None:
    shelf = make_shelf(A=100_000)
    key = shelf.bottle("A").pk
    with pytest.raises(RuntimeError, match="inside the caller's transaction"):
        locks.move_balances([locks.BalanceChange(key, 0, 1, 1, 0)])
    with pytest.raises(RuntimeError, match="inside the caller's transaction"):
        locks.lock_balances([key])
    assert shelf.balance("A") == (100_000, 0, 1)


def test_chunks_keep_the_order_and_lose_no_row(
    shelf: Shelf, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(locks, "CHUNK", 3)
    keys = [shelf.bottle(code).pk for code in reversed(CODES)]
    with CaptureQueriesContext(connection) as captured, transaction.atomic():
        after = locks.move_balances([locks.BalanceChange(key, 1, 1, 1, 0) for key in keys])
        transaction.set_rollback(True)
    assert set(after) == set(keys)
    assert {(a.on_hand, a.held, a.seq) for a in after.values()} == {(100_001, 1, 2)}
    chunks = [q["sql"] for q in captured.captured_queries if "WITH v" in q["sql"]]
    listed = [int(n) for sql in chunks for n in re.findall(r"\((\d+)(?:::bigint)?, 1", sql)]
    assert len(chunks) == 7
    assert listed == sorted(keys)
