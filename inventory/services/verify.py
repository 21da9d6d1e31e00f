"""Re-add every book and compare: the ledger is checked against itself."""

from collections.abc import Iterator
from dataclasses import dataclass

from django.db.models import F, Sum

from inventory.models import Balance, Bottle, Hold, Movement


@dataclass(frozen=True)
class LedgerFault:
    """Something that does not add up, and where."""

    bottle: str
    where: str
    detail: str


@dataclass(frozen=True)
class LedgerReport:
    bottles: int
    movements: int
    faults: tuple[LedgerFault, ...]


def verify_ledger() -> LedgerReport:
    """Walk every book in its order, re-add it, and compare with balance and open holds.

    Movements are streamed; three numbers a bottle are kept.
    """
    faults: list[LedgerFault] = []
    books: dict[int, tuple[int, int, int]] = {}
    count = 0
    for count, line in enumerate(_lines(), start=1):  # noqa: B007 - the last count is the total
        faults += _check_line(line, books)
    balances = Balance.objects.select_related("bottle").order_by("pk")
    held = _open_holds()
    bottles = 0
    for balance in balances.iterator(chunk_size=2000):
        bottles += 1
        faults += _check_balance(balance, books.pop(balance.pk, (0, 0, 0)), held)
    faults += [
        LedgerFault(code, "balance", "is missing, but the bottle has a book")
        for code in Bottle.objects.filter(pk__in=books).values_list("code", flat=True)
    ]
    return LedgerReport(bottles, count, tuple(faults))


def _lines() -> Iterator[Movement]:
    rows = Movement.objects.select_related("bottle").order_by("bottle_id", "seq")
    return rows.iterator(chunk_size=2000)


def _check_line(line: Movement, books: dict[int, tuple[int, int, int]]) -> Iterator[LedgerFault]:
    seq, on_hand, held = books.get(line.bottle_id, (0, 0, 0))
    where = f"line {line.seq}"
    if line.seq != seq + 1:
        yield LedgerFault(line.bottle.code, where, f"follows line {seq}: lines are missing")
    on_hand, held = on_hand + line.on_hand_change, held + line.held_change
    if line.on_hand_after != on_hand:
        yield LedgerFault(
            line.bottle.code, where, f"says {line.on_hand_after} on hand, the sum is {on_hand}"
        )
    if line.held_after != held:
        yield LedgerFault(
            line.bottle.code, where, f"says {line.held_after} held, the sum is {held}"
        )
    books[line.bottle_id] = (line.seq, on_hand, held)


def _open_holds() -> dict[int, int]:
    rows = (
        Hold.objects.filter(state=Hold.State.OPEN)
        .values("bottle_id")
        .annotate(left=Sum(F("amount") - F("used") - F("given_back")))
    )
    # SUM is an int on one database and a Decimal on the other.
    return {row["bottle_id"]: int(row["left"]) for row in rows}


def _check_balance(
    balance: Balance, book: tuple[int, int, int], held: dict[int, int]
) -> Iterator[LedgerFault]:
    code = balance.bottle.code
    if (balance.seq, balance.on_hand, balance.held) != book:
        yield LedgerFault(
            code, "balance",
            f"says seq {balance.seq}, {balance.on_hand} on hand, {balance.held} held; "
            f"the book says seq {book[0]}, {book[1]} on hand, {book[2]} held",
        )  # fmt: skip
    if balance.held != held.get(balance.pk, 0):
        yield LedgerFault(
            code, "holds",
            f"the balance says {balance.held} held, the open holds are {held.get(balance.pk, 0)}",
        )  # fmt: skip
