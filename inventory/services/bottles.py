"""What happens to one bottle beside reservations: use, return, loss, disposal, transfer, tests."""

import uuid
from collections.abc import Callable
from dataclasses import dataclass
from datetime import date
from decimal import Decimal

from django.db.models import F

from inventory import locks
from inventory.models import Bottle, Movement, Place, Reading
from inventory.quantities import Asked, quantity_of
from inventory.services.book import BookLine, write_lines
from inventory.services.facts import Fact, write_facts
from inventory.services.once import write_once
from inventory.services.reservations import invalid
from inventory.services.using import check_day
from labplan.base import clock
from labplan.base.errors import NotFound, StateForbids
from labplan.base.events import record_event
from labplan.base.idempotency import Once
from labplan.base.models import Project
from labplan.base.rights import Actor, require

# kind -> what the actor must be allowed to do; the first two are charged to a project
OPERATIONS = {
    "use": "stock.use",
    "return": "stock.use",
    "loss": "stock.report",
    "transfer": "stock.report",
    "disposal": "stock.count",
}
CHARGED = ("use", "return")


@dataclass(frozen=True)
class MovementOrder:
    """`asked` None means all that is in the bottle (loss, disposal); `place_code` of a transfer."""

    kind: str
    asked: Asked | None = None
    reason: str = ""
    place_code: str = ""
    is_broken: bool = False
    booked_on: date | None = None


@dataclass(frozen=True)
class BottleMoved:
    """The bottle as it is now, and how many holds were overtaken."""

    bottle_code: str
    cancelled_holds: int


def find_bottle(code: str) -> Bottle:
    """The bottle with its form and place. Raises NotFound."""
    rows = Bottle.objects.select_related("form__substance", "place", "balance")
    bottle = rows.filter(code=code).first()
    if bottle is None:
        raise NotFound(f"There is no bottle {code}.")
    return bottle


def move_bottle(
    *, actor: Actor, bottle_code: str, order: MovementOrder, project: Project | None = None,
    operation_id: uuid.UUID | None = None, once: Once | None = None,
) -> BottleMoved:  # fmt: skip
    """Record a use without a reservation, a return, a loss, a disposal or a transfer.

    All of these are facts and refused by no state; holds that cannot be kept are cancelled. A
    bottle that is broken or disposed of is emptied and never used again. Raises NotFound,
    NotAllowed, InvalidValue. Safe to repeat with the same operation id or claim.
    """
    project_id = project.pk if project else None
    require(actor, OPERATIONS[order.kind], project_id=project_id)
    bottle = find_bottle(bottle_code)
    check_day(order.booked_on)

    def body() -> BottleMoved:
        write = {"return": _return, "transfer": _transfer}.get(order.kind, _take)
        return write(bottle, order, actor, project_id, operation_id)

    def earlier(operation: uuid.UUID) -> BottleMoved:
        codes = Movement.objects.filter(operation=operation).values_list("bottle__code", flat=True)
        if bottle_code not in codes:
            raise StateForbids("This operation id belongs to something else; take a new one.")
        return BottleMoved(bottle_code, 0)

    return write_once(body, operation_id=operation_id, once=once, earlier=earlier)


def _take(
    bottle: Bottle, order: MovementOrder, actor: Actor, project_id: int | None,
    operation_id: uuid.UUID | None,
) -> BottleMoved:  # fmt: skip
    quantity = quantity_of(bottle, order.asked) if order.asked else None
    amount = quantity.amount if quantity else None
    if order.kind == "use" and amount is None:
        raise invalid("amount", "missing", "Say how much was used.")
    is_gone = order.kind == "disposal" or order.is_broken
    if is_gone and amount is not None:
        raise invalid("amount", "all_of_it", "A bottle that is gone is emptied; give no amount.")
    statuses = {bottle.pk: Bottle.Status.DISPOSED.value} if is_gone else {}
    written = write_facts(
        [Fact(bottle, order.kind, amount, quantity, reason=order.reason)],
        actor=actor, project_id=project_id, reason=order.reason, operation_id=operation_id,
        booked_on=order.booked_on, statuses=statuses,
    )  # fmt: skip
    if is_gone:
        _record_status(actor, bottle, Bottle.Status.DISPOSED, order.reason)
    return BottleMoved(bottle.code, len(written.cancelled))


def _return(
    bottle: Bottle, order: MovementOrder, actor: Actor, project_id: int | None,
    operation_id: uuid.UUID | None,
) -> BottleMoved:  # fmt: skip
    if order.asked is None:
        raise invalid("amount", "missing", "Say how much was given back.")
    quantity = quantity_of(bottle, order.asked)
    line = BookLine(
        bottle_id=bottle.pk, kind="return", on_hand_change=quantity.amount,
        entered_amount=quantity.entered_amount, entered_unit=quantity.entered_unit,
        density_g_per_ml=quantity.density_g_per_ml, density_source=quantity.density_source,
        amount_nmol=quantity.amount_nmol,
    )  # fmt: skip
    write_lines(
        [line], actor=actor, project_id=project_id, reason=order.reason,
        operation_id=operation_id, booked_on=order.booked_on,
    )  # fmt: skip
    return BottleMoved(bottle.code, 0)


def _transfer(
    bottle: Bottle, order: MovementOrder, actor: Actor, project_id: int | None,
    operation_id: uuid.UUID | None,
) -> BottleMoved:  # fmt: skip
    place = Place.objects.filter(code=order.place_code).first()
    if place is None:
        raise invalid("place", "unknown_place", f"There is no place {order.place_code!r}.")
    locks.lock_balances([bottle.pk])
    before = Bottle.objects.values_list("place__code", flat=True).get(pk=bottle.pk)
    Bottle.objects.filter(pk=bottle.pk).update(place=place, version=F("version") + 1)
    reason = f"{before} to {place.code}: {order.reason}".rstrip(": ")[:160]
    write_lines(
        [BookLine(bottle_id=bottle.pk, kind="transfer")], actor=actor, project_id=project_id,
        reason=reason, operation_id=operation_id, booked_on=order.booked_on,
    )  # fmt: skip
    return BottleMoved(bottle.code, 0)


def set_bottle_status(
    *, actor: Actor, bottle_code: str, status: str, reason: str,
    check_version: Callable[[Bottle], None], operation_id: uuid.UUID | None = None,
    once: Once | None = None,
) -> BottleMoved:  # fmt: skip
    """Set a bottle aside from use (its holds are cancelled), or give it free again.

    Everybody who works at the bench may stop a bottle; a stock keeper frees it. Raises NotFound,
    NotAllowed, StateForbids for a bottle that is disposed of, and what `check_version` raises.
    Safe to repeat with the same claim.
    """
    stops = status == Bottle.Status.QUARANTINED
    require(actor, "stock.report" if stops else "stock.count")
    bottle = find_bottle(bottle_code)

    def check(locked: Bottle) -> None:
        check_version(locked)
        if locked.status == Bottle.Status.DISPOSED:
            raise StateForbids(f"{bottle_code} is disposed of; nothing brings it back.")

    def body() -> BottleMoved:
        return _change_status(actor, bottle, status, reason, check, operation_id)

    return write_once(
        body, operation_id=operation_id, once=once,
        earlier=lambda operation: BottleMoved(bottle_code, 0),
    )  # fmt: skip


def _change_status(
    actor: Actor, bottle: Bottle, status: str, reason: str,
    check: Callable[[Bottle], None] | None = None, operation_id: uuid.UUID | None = None,
) -> BottleMoved:  # fmt: skip
    written = write_facts(
        [], actor=actor, project_id=None, reason=reason, statuses={bottle.pk: status},
        check=check, operation_id=operation_id,
    )  # fmt: skip
    _record_status(actor, bottle, status, reason)
    return BottleMoved(bottle.code, len(written.cancelled))


def _record_status(actor: Actor, bottle: Bottle, status: str, reason: str) -> None:
    record_event(
        actor_code=actor.code, kind="bottle.status", subject=f"bottle {bottle.code}",
        before=bottle.status, after={"status": status, "reason": reason},
    )  # fmt: skip


@dataclass(frozen=True)
class ReadingOrder:
    """A measurement; one that has failed takes the bottle out of use."""

    kind: str
    value: Decimal
    read_on: date
    method: str = ""
    has_failed: bool = False


def record_reading(
    *, actor: Actor, bottle_code: str, order: ReadingOrder, once: Once | None = None
) -> Reading:
    """Store a measurement; a failed test cancels the holds on the bottle in the same transaction.

    Raises NotFound, NotAllowed, InvalidValue. Safe to repeat with the same claim.
    """
    require(actor, "stock.report")
    bottle = find_bottle(bottle_code)
    if order.read_on > clock.today():
        raise invalid("read_on", "in_the_future", f"{order.read_on} has not come yet.")

    def body() -> Reading:
        reading = Reading.objects.create(
            bottle=bottle, kind=order.kind, value=order.value, method=order.method,
            read_on=order.read_on, actor_code=actor.code, recorded_at=clock.now(),
        )  # fmt: skip
        Bottle.objects.filter(pk=bottle.pk).update(version=F("version") + 1)
        if order.has_failed and bottle.status == Bottle.Status.USABLE:
            reason = f"failed {order.kind}: {order.value.normalize():f}"
            _change_status(actor, bottle, Bottle.Status.QUARANTINED, reason)
        return reading

    return write_once(body, operation_id=None, once=once, earlier=_never)


def _never(operation_id: uuid.UUID) -> Reading:
    raise AssertionError("only an operation with an id is looked up again")
