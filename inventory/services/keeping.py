"""Release, extend and make firm what is set aside."""

import uuid
from collections.abc import Callable
from datetime import date

from django.db import transaction

from inventory import locks
from inventory.models import Hold, Reservation
from inventory.services.holds import release_reservation
from inventory.services.notices import lost_hold, tell_the_app
from inventory.services.once import write_once
from inventory.services.reservations import day_within_reach, invalid
from labplan.base.errors import NotFound, StateForbids
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.rights import Actor, may, require

VersionCheck = Callable[[Reservation], None]


def require_reservation(*, actor: Actor, code: uuid.UUID, operation: str) -> Reservation:
    """The reservation, if the actor may see it and do this. Raises NotFound and NotAllowed."""
    found = Reservation.objects.filter(code=code).select_related("project").first()
    return _with_right(actor, found, code, operation)


def give_back(
    *, actor: Actor, code: uuid.UUID, reason: str, check_version: VersionCheck,
    operation_id: uuid.UUID | None = None, once: Once | None = None,
) -> Reservation:  # fmt: skip
    """Release what a reservation still holds; the app that made it is told.

    Raises NotFound, NotAllowed, StateForbids, and what `check_version` raises on the locked row.
    Safe to repeat with the same operation id or claim.
    """

    def body() -> Reservation:
        reservation = _locked(actor, code, "reservation.release")
        check_version(reservation)
        open_holds = reservation.holds.filter(state=Hold.State.OPEN).select_related("bottle")
        holds = list(open_holds.order_by("line"))
        release_reservation(actor=actor, code=code, reason=reason, operation_id=operation_id)
        tell_the_app(
            code,
            [
                lost_hold(hold, hold.amount - hold.used - hold.given_back, "it was given back")
                for hold in holds
            ],
        )
        reservation.refresh_from_db(fields=["state", "version"])
        return reservation

    def earlier(operation: uuid.UUID) -> Reservation:
        return require_reservation(actor=actor, code=code, operation="reservation.release")

    return write_once(body, operation_id=operation_id, once=once, earlier=earlier)


def extend_reservation(
    *, actor: Actor, code: uuid.UUID, expires_on: date, check_version: VersionCheck,
    once: Once | None = None,
) -> Reservation:  # fmt: skip
    """Keep what is set aside until another day; never an earlier one.

    Raises NotFound, NotAllowed, InvalidValue, StateForbids. Safe to repeat with the same claim.
    """
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        reservation = _locked(actor, code, "reservation.extend")
        check_version(reservation)
        _require_open(reservation)
        day = day_within_reach(expires_on)
        if day < reservation.expires_on:
            raise invalid("expires_on", "earlier", "Release it instead of shortening it.")
        reservation.expires_on = day
        reservation.version += 1
        reservation.save(update_fields=["expires_on", "version"])
        claim.remember(reservation)
    return reservation


def make_firm(*, actor: Actor, code: uuid.UUID, expires_on: date) -> None:
    """Mark a reservation as approved and keep it until a day, in the caller's open transaction.

    A firm reservation is given up last when a bottle turns out to hold less. Raises NotFound,
    NotAllowed, and StateForbids when it is closed or one of its holds was cancelled. Repeating it
    changes nothing.
    """
    locks.require_transaction()
    reservation = _locked(actor, code, "reservation.firm")
    _require_open(reservation)
    if reservation.holds.filter(state=Hold.State.CANCELLED).exists():
        raise StateForbids("A hold of this reservation was cancelled; set it aside again first.")
    reservation.is_firm = True
    reservation.expires_on = max(reservation.expires_on, expires_on)
    reservation.version += 1
    reservation.save(update_fields=["is_firm", "expires_on", "version"])


def _locked(actor: Actor, code: uuid.UUID, operation: str) -> Reservation:
    rows = Reservation.objects.select_for_update(no_key=True, of=("self",))
    found = rows.select_related("project").filter(code=code).first()
    return _with_right(actor, found, code, operation)


def _with_right(
    actor: Actor, reservation: Reservation | None, code: uuid.UUID, operation: str
) -> Reservation:
    if reservation is None or not may(actor, "reservation.view", project_id=reservation.project_id):
        raise NotFound(f"There is no reservation {code}.")
    require(actor, operation, project_id=reservation.project_id)
    return reservation


def _require_open(reservation: Reservation) -> None:
    if reservation.state != Reservation.State.OPEN:
        raise StateForbids("This reservation is closed; it holds nothing any more.")
