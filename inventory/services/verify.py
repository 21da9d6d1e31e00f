"""Re-add every book, compare, and walk the seals: the ledger is checked against itself."""

from dataclasses import dataclass, field
from typing import Any

from django.db.models import F, Sum

from inventory.models import Balance, Bottle, Hold
from labplan.base.seal import SealFault, SealWalk
from labplan.base.steady import steady_view

# A book that does not add up from its first line on would fill the memory with its faults.
MOST_FAULTS = 1_000
_COLUMNS = ("bottle_id", "seq", "on_hand_change", "held_change", "on_hand_after", "held_after")
_Sums = tuple[int, int, int]  # number of the last line, on hand, held
_Line = tuple[Any, ...]


@dataclass(frozen=True)
class LedgerFault:
    """Something that is not as it should be: the bottle or the book, where in it, and what."""

    bottle: str
    where: str
    detail: str


@dataclass(frozen=True)
class LedgerReport:
    """`faults` are the first MOST_FAULTS of `found`."""

    bottles: int
    movements: int
    faults: tuple[LedgerFault, ...]
    found: int = 0
    seals: int = 0
    sealed_rows: int = 0
    unsealed_rows: int = 0
    newest: str = ""


@dataclass
class _Faults:
    first: list[LedgerFault] = field(default_factory=list)
    found: int = 0

    def add(self, bottle: str, where: str, detail: str) -> None:
        self.found += 1
        if self.found <= MOST_FAULTS:
            self.first.append(LedgerFault(bottle, where, detail))

    def add_seal_fault(self, fault: SealFault) -> None:
        self.add(fault.place, fault.where, fault.detail)


def verify_ledger(*, newest: str = "") -> LedgerReport:
    """Re-add every book, compare with balances and open holds, walk every seal and sealed row.

    `newest` is a seal as it was printed; it must be in the chain. Everything is read as it was at
    one moment while others go on writing. Rows are streamed; three numbers a bottle are kept.
    """
    with steady_view():
        faults = _Faults()
        walk = SealWalk(faults.add_seal_fault)
        walk.check_chain(newest=newest)
        books: dict[int, _Sums] = {}
        count = 0
        for count, line in enumerate(walk.rows("stock", _COLUMNS), start=1):  # noqa: B007
            _check_line(line, books, faults)
        bottles = _check_balances(books, faults)
        walk.check_other_books()
    return LedgerReport(
        bottles, count, tuple(faults.first), faults.found, walk.seals, walk.sealed_rows,
        walk.unsealed_rows, walk.newest,
    )  # fmt: skip


def _check_line(line: _Line, books: dict[int, _Sums], faults: _Faults) -> None:
    bottle, number, on_hand_change, held_change, on_hand_after, held_after = line
    before, on_hand, held = books.get(bottle, (0, 0, 0))
    try:
        on_hand, held = on_hand + on_hand_change, held + held_change
    except TypeError:
        faults.add(_code(bottle), f"line {number}", "has an amount that is no whole number")
        return
    if number != before + 1 or on_hand_after != on_hand or held_after != held:
        _say_line(line, before, on_hand, held, faults)
    books[bottle] = (number, on_hand, held)


def _say_line(line: _Line, before: int, on_hand: int, held: int, faults: _Faults) -> None:
    bottle, number, _, _, on_hand_after, held_after = line
    code, where = _code(bottle), f"line {number}"
    if number != before + 1:
        faults.add(code, where, f"follows line {before}: lines are missing")
    if on_hand_after != on_hand:
        faults.add(code, where, f"says {on_hand_after} on hand, the sum is {on_hand}")
    if held_after != held:
        faults.add(code, where, f"says {held_after} held, the sum is {held}")


def _check_balances(books: dict[int, _Sums], faults: _Faults) -> int:
    """Compare every balance with its book and its open holds; return how many there are."""
    held, bottles = _open_holds(), 0
    rows = Balance.objects.order_by("pk").values_list("pk", "seq", "on_hand", "held")
    for bottle, *sums in rows.iterator(chunk_size=2000):
        bottles += 1
        _check_balance(bottle, (sums[0], sums[1], sums[2]), books, held, faults)
    for bottle in sorted(books):
        faults.add(_code(bottle), "balance", "is missing, but the bottle has a book")
    return bottles


def _check_balance(
    bottle: int, balance: _Sums, books: dict[int, _Sums], held: dict[int, int], faults: _Faults
) -> None:
    book, open_holds = books.pop(bottle, (0, 0, 0)), held.get(bottle, 0)
    if balance != book:
        faults.add(
            _code(bottle), "balance",
            f"says seq {balance[0]}, {balance[1]} on hand, {balance[2]} held; "
            f"the book says seq {book[0]}, {book[1]} on hand, {book[2]} held",
        )  # fmt: skip
    if balance[2] != open_holds:
        faults.add(
            _code(bottle), "holds",
            f"the balance says {balance[2]} held, the open holds are {open_holds}",
        )  # fmt: skip


def _open_holds() -> dict[int, int]:
    rows = (
        Hold.objects.filter(state=Hold.State.OPEN)
        .values("bottle_id")
        .annotate(left=Sum(F("amount") - F("used") - F("given_back")))
    )
    # SUM is an int on one database and a Decimal on the other.
    return {row["bottle_id"]: int(row["left"]) for row in rows}


def _code(bottle: int) -> str:
    code = Bottle.objects.filter(pk=bottle).values_list("code", flat=True).first()
    return code or f"bottle {bottle}"
