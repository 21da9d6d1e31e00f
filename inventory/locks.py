"""All locking of the stock, in one place: balances, by key, in one statement.

The statement locks the rows in the order of their keys, checks and updates them. Its text is
the same on both databases but for the lock clause, which SQLite (one writer at a time) needs
not. FOR NO KEY UPDATE does not block inserts that point at the bottle.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from django.db import connection

from inventory.models import Balance, Reservation

CHUNK = 500


@dataclass(frozen=True)
class BalanceChange:
    """What one bottle's balance is to change by, all lines of an operation together.

    `keep_back` is what must stay free after it: the heel for a hold, else 0. `intends` is set for
    what only a usable bottle may promise; a fact is written on any.
    """

    bottle_id: int
    on_hand_change: int
    held_change: int
    lines: int
    keep_back: int
    intends: bool = False


@dataclass(frozen=True)
class BalanceAfter:
    bottle_id: int
    on_hand: int
    held: int
    seq: int


def move_balances(changes: Sequence[BalanceChange]) -> dict[int, BalanceAfter]:
    """Lock, check and change balances; return those that allowed it, by bottle.

    A bottle missing from the answer did not have enough: the caller must roll back.
    """
    require_transaction()
    done: dict[int, BalanceAfter] = {}
    ordered = sorted(changes, key=lambda change: change.bottle_id)
    with connection.cursor() as cursor:
        for start in range(0, len(ordered), CHUNK):
            chunk = ordered[start : start + CHUNK]
            cursor.execute(_statement(len(chunk)), _parameters(chunk))
            for row in cursor.fetchall():
                done[row[0]] = BalanceAfter(*row)
    return done


def lock_balances(bottle_ids: Iterable[int]) -> None:
    """Keep others from moving these bottles until the transaction ends."""
    require_transaction()
    rows = Balance.objects.filter(pk__in=set(bottle_ids)).order_by("pk")
    list(rows.select_for_update(no_key=True).values_list("pk"))


def lock_reservations(reservation_ids: Iterable[int]) -> dict[int, Reservation]:
    """Lock reservations in the order of their keys: always before balances."""
    require_transaction()
    rows = Reservation.objects.filter(pk__in=set(reservation_ids)).order_by("pk")
    return {row.pk: row for row in rows.select_for_update(no_key=True, of=("self",))}


def read_balances(bottle_ids: Iterable[int]) -> dict[int, Balance]:
    """Lock balances in the order of their keys and read them as they are now."""
    require_transaction()
    rows = Balance.objects.filter(pk__in=set(bottle_ids)).order_by("pk")
    return {row.pk: row for row in rows.select_for_update(no_key=True)}


def set_usable(bottle_id: int, usable: bool) -> None:
    """Let holds be made on a bottle, or not; the caller keeps the balance locked."""
    require_transaction()
    Balance.objects.filter(pk=bottle_id).update(is_usable=usable)


def require_transaction() -> None:
    """Every writer of the stock starts here: half of its work must never stay behind."""
    if not connection.in_atomic_block:
        raise RuntimeError("balances are moved inside the caller's transaction")


def _statement(rows: int) -> str:
    cast = "::bigint" if connection.vendor == "postgresql" else ""
    row = "(" + ", ".join([f"%s{cast}"] * 6) + ")"
    values = ", ".join([row] * rows)
    lock = "FOR NO KEY UPDATE OF b" if connection.vendor == "postgresql" else ""
    return f"""
WITH v(bottle_id, on_hand_change, held_change, lines, keep_back, intends) AS (VALUES {values}),
l AS (
    SELECT b.bottle_id FROM inventory_balance b JOIN v ON v.bottle_id = b.bottle_id
    ORDER BY b.bottle_id {lock}
)
UPDATE inventory_balance
SET on_hand = inventory_balance.on_hand + v.on_hand_change,
    held = inventory_balance.held + v.held_change,
    seq = inventory_balance.seq + v.lines
FROM v JOIN l ON l.bottle_id = v.bottle_id
WHERE inventory_balance.bottle_id = v.bottle_id
  AND inventory_balance.on_hand + v.on_hand_change >= 0
  AND inventory_balance.held + v.held_change >= 0
  AND inventory_balance.on_hand + v.on_hand_change
      - inventory_balance.held - v.held_change >= v.keep_back
  AND (inventory_balance.is_usable OR v.intends = 0)
RETURNING inventory_balance.bottle_id, inventory_balance.on_hand, inventory_balance.held,
          inventory_balance.seq
"""


def _parameters(chunk: Sequence[BalanceChange]) -> list[int]:
    return [
        number
        for change in chunk
        for number in (
            change.bottle_id,
            change.on_hand_change,
            change.held_change,
            change.lines,
            change.keep_back,
            int(change.intends),
        )
    ]
