"""The one writer of movements: balances and book change together or not at all."""

import uuid
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from decimal import Decimal
from typing import Any

from inventory import locks
from inventory.errors import Shortfall, StockShort
from inventory.models import Balance, Movement
from inventory.quantities import in_words
from inventory.rows import insert_rows
from labplan.base import clock
from labplan.base.errors import FieldProblem
from labplan.base.rights import Actor

_COLUMNS = (
    "bottle", "seq", "kind", "on_hand_change", "held_change", "on_hand_after", "held_after",
    "entered_amount", "entered_unit", "density_g_per_ml", "density_source", "amount_nmol", "hold",
    "operation", "part", "project", "actor_code", "reason", "booked_on", "recorded_at",
)  # fmt: skip
# What only a bottle in use may promise; all other kinds are facts, or give something back.
_INTENTIONS = frozenset({"hold", "decant_out"})


@dataclass(frozen=True)
class BookLine:
    """One movement to be written. Amounts in the base unit of the bottle."""

    bottle_id: int
    kind: str
    on_hand_change: int = 0
    held_change: int = 0
    entered_amount: str = ""
    entered_unit: str = ""
    density_g_per_ml: Decimal | None = None
    density_source: str = ""
    amount_nmol: int | None = None
    hold_id: int | None = None
    keep_back: int = 0
    # set where the line's project or reason is not that of the whole operation
    project_id: int | None = None
    reason: str = ""


def write_lines(
    lines: Sequence[BookLine], *, actor: Actor, project_id: int | None, reason: str,
    operation_id: uuid.UUID | None = None, booked_on: date | None = None,
) -> uuid.UUID:  # fmt: skip
    """Move the balances and append the movements in the caller's transaction.

    Raises StockShort with every bottle that has too little; the caller's transaction must then
    roll back. Returns the operation id that all the movements share. The database takes an
    operation once: a second time it raises IntegrityError (movement_operation_once).
    """
    by_bottle: dict[int, list[tuple[int, BookLine]]] = defaultdict(list)
    for number, line in enumerate(lines, start=1):
        by_bottle[line.bottle_id].append((number, line))
    after = locks.move_balances([_change(bottle, found) for bottle, found in by_bottle.items()])
    if len(after) < len(by_bottle):
        raise _short({b: found for b, found in by_bottle.items() if b not in after})
    operation = operation_id or uuid.uuid4()
    booked_on, recorded_at = booked_on or clock.today(), clock.now()
    rows: list[tuple[Any, ...]] = []
    for bottle_id in sorted(by_bottle):
        found = [line for _, line in by_bottle[bottle_id]]
        for line, seq, on_hand, held in _walk(found, after[bottle_id]):
            rows.append(
                (
                    bottle_id, seq, line.kind, line.on_hand_change, line.held_change, on_hand,
                    held, line.entered_amount, line.entered_unit, line.density_g_per_ml,
                    line.density_source, line.amount_nmol, line.hold_id, operation, len(rows) + 1,
                    line.project_id or project_id, actor.code, line.reason or reason, booked_on,
                    recorded_at,
                )
            )  # fmt: skip
    insert_rows(Movement, _COLUMNS, rows)
    return operation


def _change(bottle_id: int, found: list[tuple[int, BookLine]]) -> locks.BalanceChange:
    lines = [line for _, line in found]
    return locks.BalanceChange(
        bottle_id=bottle_id,
        on_hand_change=sum(line.on_hand_change for line in lines),
        held_change=sum(line.held_change for line in lines),
        lines=len(lines),
        keep_back=max(line.keep_back for line in lines),
        intends=any(line.kind in _INTENTIONS for line in lines),
    )


def _walk(lines: list[BookLine], after: locks.BalanceAfter) -> list[tuple[BookLine, int, int, int]]:
    """Number the lines of one bottle and give the sums after each, ending in the new balance."""
    seq = after.seq - len(lines)
    on_hand = after.on_hand - sum(line.on_hand_change for line in lines)
    held = after.held - sum(line.held_change for line in lines)
    walked = []
    for line in lines:
        seq, on_hand, held = seq + 1, on_hand + line.on_hand_change, held + line.held_change
        walked.append((line, seq, on_hand, held))
    return walked


def _short(refused: dict[int, list[tuple[int, BookLine]]]) -> StockShort:
    balances = Balance.objects.select_related("bottle").in_bulk(refused)
    shortfalls, errors = [], []
    for bottle_id, found in refused.items():
        balance = balances[bottle_id]
        keep_back = max(line.keep_back for _, line in found)
        usable = max(0, balance.on_hand - balance.held - keep_back) if balance.is_usable else 0
        shortfalls.append(
            Shortfall(
                line=found[0][0],
                bottle=balance.bottle.code,
                needed=sum(line.held_change - line.on_hand_change for _, line in found),
                usable=usable,
            )
        )
        needed = in_words(balance.bottle.measured_by, shortfalls[-1].needed)
        left = in_words(balance.bottle.measured_by, usable)
        errors.append(
            FieldProblem(
                f"line {found[0][0]}", "short",
                f"{balance.bottle.code}: {needed} needed, {left} can be used.",
            )
        )  # fmt: skip
    bottles = ", ".join(sorted(shortfall.bottle for shortfall in shortfalls))
    return StockShort(
        f"Not enough left in {bottles}: somebody may have claimed it meanwhile.",
        shortfalls=tuple(sorted(shortfalls, key=lambda s: s.line)),
        errors=tuple(errors),
    )
