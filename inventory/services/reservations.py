"""Set aside by substance or by bottle, all of it or what there is."""

import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta

from django.db import transaction

from inventory.errors import StockShort
from inventory.models import Bottle, Movement, Reservation
from inventory.quantities import Asked, Quantity, in_words, own_quantity, quantity_of
from inventory.services.holds import HoldLine, hold_lines, keep_still
from inventory.services.once import write_once
from inventory.services.picking import ANY, Candidate, Wanted, candidates_for, pick
from labplan.base import clock
from labplan.base.errors import FieldProblem, InvalidValue, StateForbids
from labplan.base.idempotency import Once
from labplan.base.models import Project
from labplan.base.rights import Actor, require

DEFAULT_DAYS = 14
LONGEST_DAYS = 92
FREE_TRIES = 2


@dataclass(frozen=True)
class ReservationLine:
    """An amount of a bottle, or of a substance from bottles that are as `wanted`."""

    asked: Asked
    bottle_code: str = ""
    substance_code: str = ""
    wanted: Wanted = ANY


@dataclass(frozen=True)
class ReservationOrder:
    lines: tuple[ReservationLine, ...]
    purpose: str
    expires_on: date | None = None
    # set aside what there is and list what is missing, instead of all or nothing
    takes_what_there_is: bool = False


@dataclass(frozen=True)
class Missing:
    """A line of the request that is not met in full, in words."""

    line: int
    detail: str


@dataclass(frozen=True)
class Reserved:
    reservation: Reservation
    shortfalls: tuple[Missing, ...]


def reserve(
    *, actor: Actor, project: Project, order: ReservationOrder,
    operation_id: uuid.UUID | None = None, once: Once | None = None,
) -> Reserved:  # fmt: skip
    """Set amounts aside for a project.

    All lines or none, or with `takes_what_there_is` as much as there is, the rest listed. Raises
    NotAllowed, InvalidValue, NotFound, QuotaExceeded, StockShort; then nothing is set aside. Safe
    to repeat with the same operation id or claim.
    """
    require(actor, "reservation.make", project_id=project.pk)
    expires_on = day_within_reach(order.expires_on)
    return write_once(
        lambda: _reserve(actor, project, order, expires_on, operation_id),
        operation_id=operation_id, once=once, earlier=_made_by,
    )  # fmt: skip


def _reserve(
    actor: Actor, project: Project, order: ReservationOrder, expires_on: date,
    operation_id: uuid.UUID | None,
) -> Reserved:  # fmt: skip
    """Choose and hold; chosen again when somebody was faster, at last on rows kept still."""
    for _ in range(FREE_TRIES):
        try:
            with transaction.atomic():
                return _choose_and_hold(actor, project, order, expires_on, operation_id)
        except StockShort as short:
            if not any(line.field.startswith("line ") for line in short.errors):
                raise
    keep_still(_bottles_in_question(order))
    return _choose_and_hold(actor, project, order, expires_on, operation_id)


def _choose_and_hold(
    actor: Actor, project: Project, order: ReservationOrder, expires_on: date,
    operation_id: uuid.UUID | None,
) -> Reserved:  # fmt: skip
    chosen, missing = _choose(order)
    if missing and not (order.takes_what_there_is and chosen):
        raise StockShort(
            "The stock does not allow all of it; nothing was set aside. "
            + " ".join(line.detail for line in missing),
            errors=tuple(
                FieldProblem(f"lines[{line.line - 1}]", "short", line.detail) for line in missing
            ),
        )
    reservation = hold_lines(
        actor=actor, project_id=project.pk, purpose=order.purpose, expires_on=expires_on,
        lines=[_hold_line(bottle, quantity) for bottle, quantity in chosen],
        operation="reservation.make", operation_id=operation_id,
    )  # fmt: skip
    return Reserved(reservation, missing)


Chosen = list[tuple[Bottle, Quantity]]


def _choose(order: ReservationOrder) -> tuple[Chosen, tuple[Missing, ...]]:
    """A bottle for each line, what earlier lines take from it counted."""
    named = _named_bottles(order)
    taken: dict[int, int] = {}
    chosen: Chosen = []
    missing: list[Missing] = []
    for number, line in enumerate(order.lines, start=1):
        field = f"lines[{number - 1}]"
        found = _of_bottle(line, field, named) if line.bottle_code else _of_substance(line, field)
        left = [
            Candidate(c.bottle, max(0, c.usable - taken.get(c.bottle.pk, 0)), c.needed)
            for c in found
        ]
        picked = pick(left)
        for bottle, amount in (
            picked.parts if not picked.missing or order.takes_what_there_is else ()
        ):
            taken[bottle.pk] = taken.get(bottle.pk, 0) + amount
            chosen.append((bottle, _quantity(bottle, amount, line.asked, field)))
        if picked.missing:
            missing.append(Missing(number, _missing_text(line, left)))
    return chosen, tuple(missing)


def _named_bottles(order: ReservationOrder) -> dict[str, Bottle]:
    codes = {line.bottle_code for line in order.lines if line.bottle_code}
    rows = Bottle.objects.filter(code__in=codes).select_related("form__substance", "balance")
    return {bottle.code: bottle for bottle in rows} if codes else {}


def _of_bottle(line: ReservationLine, field: str, named: dict[str, Bottle]) -> list[Candidate]:
    bottle = named.get(line.bottle_code)
    if bottle is None:
        raise invalid(f"{field}.bottle", "unknown_bottle", f"No bottle {line.bottle_code}.")
    needed = quantity_of(bottle, line.asked, field=field).amount
    _check_dispensable(bottle, needed, field)
    balance = bottle.balance
    usable = max(0, balance.on_hand - balance.held - bottle.heel)
    is_good = bottle.status == Bottle.Status.USABLE and not _is_expired(bottle)
    return [Candidate(bottle, usable if is_good else 0, needed)]


def _of_substance(line: ReservationLine, field: str) -> list[Candidate]:
    found = candidates_for(line.substance_code, line.asked, line.wanted, on_day=clock.today())
    fit = [c for c in found if c.needed >= c.bottle.least_dispensed]
    if found and not fit:
        _check_dispensable(found[0].bottle, found[0].needed, field)
    return fit


def _check_dispensable(bottle: Bottle, needed: int, field: str) -> None:
    if needed < bottle.least_dispensed:
        least = in_words(bottle.measured_by, bottle.least_dispensed)
        raise invalid(
            field, "below_least",
            f"Less than {least} cannot be dispensed from {bottle.code}: ask for more, or make a "
            "stock solution.",
        )  # fmt: skip


def _is_expired(bottle: Bottle) -> bool:
    return bottle.expires_on is not None and bottle.expires_on < clock.today()


def _quantity(bottle: Bottle, amount: int, asked: Asked, field: str) -> Quantity:
    """As it was entered where the bottle gives all of it, else in the bottle's own unit."""
    whole = quantity_of(bottle, asked, field=field)
    return whole if whole.amount == amount else own_quantity(bottle, amount)


def _missing_text(line: ReservationLine, found: Sequence[Candidate]) -> str:
    needed = f"{line.asked.text} {line.asked.unit}"
    if line.bottle_code:
        bottle = found[0].bottle
        if bottle.status != Bottle.Status.USABLE:
            return f"{bottle.code} is {bottle.status}."
        if _is_expired(bottle):
            return f"{bottle.code} expired on {bottle.expires_on}."
        usable = in_words(bottle.measured_by, found[0].usable)
        return f"{bottle.code}: {needed} needed, {usable} can be used."
    if not found:
        return f"{line.substance_code}: no bottle is fit for it ({needed} needed)."
    usable = ", ".join(f"{c.bottle.code} {in_words(c.bottle.measured_by, c.usable)}" for c in found)
    return f"{line.substance_code}: {needed} needed, can be used: {usable}."


def _hold_line(bottle: Bottle, quantity: Quantity) -> HoldLine:
    return HoldLine(
        bottle.code, quantity.amount, quantity.entered_amount, quantity.entered_unit,
        quantity.density_g_per_ml, quantity.amount_nmol, quantity.density_source,
    )  # fmt: skip


def _bottles_in_question(order: ReservationOrder) -> list[str]:
    named = {line.bottle_code for line in order.lines if line.bottle_code}
    substances = {line.substance_code for line in order.lines if line.substance_code}
    of_substances = Bottle.objects.filter(form__substance__code__in=substances)
    return [*named, *of_substances.values_list("code", flat=True)]


def _made_by(operation_id: uuid.UUID) -> Reserved:
    line = Movement.objects.select_related("hold__reservation").filter(operation=operation_id)[0]
    if line.hold is None:
        raise StateForbids("This operation id belongs to something else; take a new one.")
    return Reserved(line.hold.reservation, ())


def day_within_reach(asked: date | None) -> date:
    """Until when it is set aside; raises InvalidValue for a day that is past or too far off."""
    today = clock.today()
    day = asked or today + timedelta(days=DEFAULT_DAYS)
    if not today <= day <= today + timedelta(days=LONGEST_DAYS):
        raise invalid(
            "expires_on", "out_of_range",
            f"Give a day from {today} to {today + timedelta(days=LONGEST_DAYS)}.",
        )  # fmt: skip
    return day


def invalid(field: str, code: str, detail: str) -> InvalidValue:
    """A refusal of one field."""
    return InvalidValue(detail, errors=(FieldProblem(field, code, detail),))
