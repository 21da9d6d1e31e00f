"""Write down what was really taken, against what was set aside."""

import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date

from inventory.models import Bottle, Hold, Movement, Reservation
from inventory.quantities import Asked, quantity_of
from inventory.services.facts import Fact, write_facts
from inventory.services.keeping import require_reservation
from inventory.services.once import write_once
from inventory.services.reservations import invalid
from labplan.base import clock
from labplan.base.errors import StateForbids
from labplan.base.idempotency import Once
from labplan.base.rights import Actor


@dataclass(frozen=True)
class Actual:
    """What was weighed or measured for one line; from another bottle where one is named.

    `closes`: nothing more is taken for this line, the rest of what it holds is free again.
    """

    line: int
    asked: Asked
    bottle_code: str = ""
    closes: bool = True


@dataclass(frozen=True)
class Used:
    """The reservation as it is now, and how many holds of others were overtaken."""

    reservation: Reservation
    cancelled_holds: int


def use_reservation(
    *, actor: Actor, code: uuid.UUID, actuals: Sequence[Actual], reason: str = "",
    booked_on: date | None = None, operation_id: uuid.UUID | None = None,
    once: Once | None = None,
) -> Used:  # fmt: skip
    """Record what was used. It is a fact: no state of hold, bottle or project refuses it.

    What goes beyond a hold comes from free stock, then from what others hold: the holds that
    cannot be kept are cancelled and their people told, in the same transaction. Raises NotFound,
    NotAllowed, InvalidValue. Safe to repeat with the same operation id or claim.
    """
    reservation = require_reservation(actor=actor, code=code, operation="reservation.use")
    check_day(booked_on)

    def body() -> Used:
        facts = _facts(reservation, actuals, reason)
        written = write_facts(
            facts, actor=actor, project_id=reservation.project_id,
            reason=reason or reservation.purpose, operation_id=operation_id,
            booked_on=booked_on,
        )  # fmt: skip
        reservation.refresh_from_db(fields=["state", "version"])
        return Used(reservation, len(written.cancelled))

    def earlier(operation: uuid.UUID) -> Used:
        return Used(_used_by(operation), 0)

    return write_once(body, operation_id=operation_id, once=once, earlier=earlier)


def _facts(reservation: Reservation, actuals: Sequence[Actual], reason: str) -> list[Fact]:
    rows = Hold.objects.filter(reservation=reservation).select_related("bottle__form__substance")
    holds = {hold.line: hold for hold in rows}
    others = _other_bottles(actuals)
    facts = []
    for number, actual in enumerate(actuals):
        field = f"lines[{number}]"
        hold = holds.get(actual.line)
        if hold is None:
            raise invalid(f"{field}.line", "unknown_line", f"There is no line {actual.line}.")
        bottle = others.get(actual.bottle_code, hold.bottle)
        if actual.bottle_code and actual.bottle_code not in others:
            raise invalid(f"{field}.bottle", "unknown_bottle", f"No bottle {actual.bottle_code}.")
        if bottle.form.substance_id != hold.bottle.form.substance_id:
            raise invalid(
                f"{field}.bottle", "another_substance",
                f"{bottle.code} holds {bottle.form.substance.name}; record that as a use of its "
                "own.",
            )  # fmt: skip
        quantity = quantity_of(bottle, actual.asked, field=field)
        facts.append(
            Fact(
                bottle, "use", quantity.amount, quantity, reason=reason, hold_id=hold.pk,
                closes=actual.closes,
            )
        )  # fmt: skip
    return facts


def _other_bottles(actuals: Sequence[Actual]) -> dict[str, Bottle]:
    codes = {actual.bottle_code for actual in actuals if actual.bottle_code}
    rows = Bottle.objects.filter(code__in=codes).select_related("form__substance")
    return {bottle.code: bottle for bottle in rows} if codes else {}


def _used_by(operation_id: uuid.UUID) -> Reservation:
    line = (
        Movement.objects.filter(operation=operation_id, kind="use", hold__isnull=False)
        .select_related("hold__reservation__project")
        .first()
    )
    if line is None:
        raise StateForbids("This operation id belongs to something else; take a new one.")
    return line.hold.reservation


def check_day(booked_on: date | None) -> None:
    """Nothing has happened yet that is to be booked tomorrow."""
    if booked_on is not None and booked_on > clock.today():
        raise invalid("booked_on", "in_the_future", f"{booked_on} has not come yet.")
