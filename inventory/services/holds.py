"""Set amounts aside and give them back."""

import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from decimal import Decimal

from django.db import connection
from django.db.models import F

from inventory import locks
from inventory.errors import Shortfall, StockShort
from inventory.models import Bottle, Hold, Reservation
from inventory.quantities import own_quantity
from inventory.rows import insert_rows
from inventory.services.book import BookLine, write_lines
from inventory.services.quotas import QUOTA_TODAY, check_quotas
from labplan.base import clock
from labplan.base.errors import NotFound, StateForbids
from labplan.base.rights import LABPLAN, Actor, require

_RESERVATION_COLUMNS = (
    "code", "project_id", "actor_code", "purpose", "state", "is_firm", "expires_on", "created_at",
    "version",
)  # fmt: skip
_HOLD_COLUMNS = ("reservation", "line", "bottle", "amount", "used", "given_back", "state")


@dataclass(frozen=True)
class HoldLine:
    """One line to set aside: an amount of a bottle in its base unit, as it was asked for."""

    bottle_code: str
    amount: int
    entered_amount: str
    entered_unit: str
    density_g_per_ml: Decimal | None = None
    amount_nmol: int | None = None
    density_source: str = ""


def hold_lines(
    *, actor: Actor, project_id: int, purpose: str, expires_on: date, lines: Sequence[HoldLine],
    operation: str = "procedure.request", operation_id: uuid.UUID | None = None,
) -> Reservation:  # fmt: skip
    """Set every line aside or none, in the caller's open transaction.

    Guarantees that on hand - held never falls under the heel of a bottle. Raises NotAllowed,
    QuotaExceeded, StockShort (all short bottles listed; the caller rolls back) or NotFound for a
    bottle code.
    """
    locks.require_transaction()
    require(actor, operation, project_id=project_id)
    bottles, has_quota = _sources(lines, project_id)
    if has_quota:
        check_quotas(
            project_id=project_id,
            claims=[(bottles[line.bottle_code].key, line.amount) for line in lines],
        )
    reservation = Reservation(
        code=uuid.uuid4(), project_id=project_id, actor_code=actor.code, purpose=purpose,
        expires_on=expires_on, created_at=clock.now(),
    )  # fmt: skip
    values = [getattr(reservation, name) for name in _RESERVATION_COLUMNS]
    [reservation.pk] = insert_rows(Reservation, _RESERVATION_COLUMNS, [values])
    reservation._state.adding = False
    holds = insert_rows(
        Hold, _HOLD_COLUMNS,
        [
            (reservation.pk, number, bottles[line.bottle_code].key, line.amount, 0, 0, "open")
            for number, line in enumerate(lines, start=1)
        ],
    )  # fmt: skip
    write_lines(
        [_book_line(line, hold, bottles) for line, hold in zip(lines, holds, strict=True)],
        actor=actor, project_id=project_id, reason=purpose, operation_id=operation_id,
    )  # fmt: skip
    return reservation


def release_reservation(
    *, actor: Actor, code: uuid.UUID, reason: str, operation_id: uuid.UUID | None = None,
    must_be_open: bool = True,
) -> None:  # fmt: skip
    """Give back what a reservation still holds, in the caller's open transaction.

    Raises NotFound, NotAllowed, and StateForbids when it is closed already; without
    `must_be_open` a closed one is left as it is.
    """
    locks.require_transaction()
    reservation = Reservation.objects.select_for_update(no_key=True).filter(code=code).first()
    if reservation is None:
        raise NotFound("There is no reservation with this code.")
    require(actor, "reservation.release", project_id=reservation.project_id)
    if reservation.state != Reservation.State.OPEN:
        if must_be_open:
            raise StateForbids("This reservation is closed; it holds nothing any more.")
        return
    _give_all_back(
        reservation, actor=actor, reason=reason, kind="release", end=Hold.State.RELEASED,
        operation_id=operation_id,
    )  # fmt: skip


def lapse_reservation(*, code: uuid.UUID, reason: str) -> bool:
    """Give back what a reservation still holds when its last day is over, in the caller's open
    transaction; False, and nothing changed, when it is closed or was extended meanwhile.
    """
    locks.require_transaction()
    reservation = Reservation.objects.select_for_update(no_key=True).get(code=code)
    if not reservation.is_overdue(clock.today()):
        return False
    _give_all_back(reservation, actor=LABPLAN, reason=reason, kind="lapse", end=Hold.State.LAPSED)
    return True


def _give_all_back(
    reservation: Reservation,
    *,
    actor: Actor,
    reason: str,
    kind: str,
    end: str,
    operation_id: uuid.UUID | None = None,
) -> None:
    open_holds = reservation.holds.filter(state=Hold.State.OPEN)
    holds = list(open_holds.select_related("bottle__form__substance").order_by("line"))
    write_lines(
        [_give_back_line(hold, kind) for hold in holds],
        actor=actor, project_id=reservation.project_id, reason=reason, operation_id=operation_id,
    )  # fmt: skip
    open_holds.update(given_back=F("amount") - F("used"), state=end)
    reservation.state = Reservation.State.CLOSED
    reservation.version += 1
    reservation.save(update_fields=["state", "version"])


def keep_still(bottle_codes: Sequence[str]) -> None:
    """Let nobody else move these bottles until the caller's transaction ends."""
    locks.lock_balances(Bottle.objects.filter(code__in=bottle_codes).values_list("pk", flat=True))


@dataclass(frozen=True)
class _Source:
    """What a hold has to know of its bottle."""

    key: int
    status: str
    heel: int


def _sources(lines: Sequence[HoldLine], project_id: int) -> tuple[dict[str, _Source], bool]:
    """The bottles by code, and whether any quota limits the project today.

    Every hold asks for both: hence in one statement and in plain SQL.
    """
    codes = list(dict.fromkeys(line.bottle_code for line in lines))
    if not codes:
        return {}, False
    today = clock.today().isoformat()
    with connection.cursor() as cursor:
        cursor.execute(
            f"SELECT code, id, status, heel, {QUOTA_TODAY} FROM inventory_bottle "
            f"WHERE code IN ({', '.join(['%s'] * len(codes))})",
            [project_id, today, today, *codes],
        )
        rows = cursor.fetchall()
    bottles = {code: _Source(key, status, heel) for code, key, status, heel, _ in rows}
    missing = sorted(set(codes) - bottles.keys())
    if missing:
        raise NotFound(f"There is no bottle {', '.join(missing)}.")
    unusable = sorted(c for c, b in bottles.items() if b.status != Bottle.Status.USABLE)
    if unusable:
        raise StockShort(
            f"Set aside from use: {', '.join(unusable)}.",
            shortfalls=tuple(_none_usable(lines, code) for code in unusable),
        )
    return bottles, any(row[-1] for row in rows)


def _none_usable(lines: Sequence[HoldLine], code: str) -> Shortfall:
    asked = [(number, line) for number, line in enumerate(lines, 1) if line.bottle_code == code]
    return Shortfall(
        line=asked[0][0], bottle=code, needed=sum(line.amount for _, line in asked), usable=0
    )


def _book_line(line: HoldLine, hold_id: int, bottles: dict[str, _Source]) -> BookLine:
    bottle = bottles[line.bottle_code]
    return BookLine(
        bottle_id=bottle.key, kind="hold", held_change=line.amount,
        entered_amount=line.entered_amount, entered_unit=line.entered_unit,
        density_g_per_ml=line.density_g_per_ml, density_source=line.density_source,
        amount_nmol=line.amount_nmol,
        hold_id=hold_id, keep_back=bottle.heel,
    )  # fmt: skip


def _give_back_line(hold: Hold, kind: str) -> BookLine:
    left = hold.amount - hold.used - hold.given_back
    quantity = own_quantity(hold.bottle, left)
    return BookLine(
        bottle_id=hold.bottle_id, kind=kind, held_change=-left, hold_id=hold.pk,
        entered_amount=quantity.entered_amount, entered_unit=quantity.entered_unit,
    )  # fmt: skip
