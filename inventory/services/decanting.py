"""Fill a bottle from another one: as it is, or as a preparation of the house."""

import uuid
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal
from typing import Any

from django.db.models import F

from inventory.models import Balance, Bottle, Form, Movement, Place, Reading
from inventory.quantities import Asked, Quantity, in_words, quantity_of
from inventory.selectors.shelf import latest_readings
from inventory.services.book import BookLine, write_lines
from inventory.services.bottles import find_bottle
from inventory.services.once import again_if_overtaken, write_once
from inventory.services.receipt import heel_of, is_solvent, least_dispensed_of
from inventory.services.reservations import invalid
from inventory.services.using import check_day
from labplan.base import clock
from labplan.base.errors import StateForbids
from labplan.base.idempotency import Once
from labplan.base.models import Project
from labplan.base.rights import Actor, require

# What a bottle filled from another one has of it.
_INHERITED = (
    "form_id", "measured_by", "lot", "supplier", "assay_pct", "assay_of", "assay_kind",
    "density_g_per_ml", "density_temperature_c", "stabiliser_state", "stabiliser_name",
    "stabiliser_amount_pct", "stabiliser_basis",
)  # fmt: skip
# What a preparation has still: where it came from.
_KEPT_BY_PREPARATION = ("measured_by", "lot", "supplier")


@dataclass(frozen=True)
class Preparation:
    """What was made of the content: everything that may have changed is said anew."""

    text: str  # "dried over 3A sieves for 48 h"
    form: dict[str, Any]  # fields of Form beside the substance
    stabiliser: dict[str, Any]  # the stabiliser's fields of Bottle
    water_ppm: Decimal | None  # None: not measured
    fields: dict[str, Any] = field(default_factory=dict)  # assay, density


@dataclass(frozen=True)
class DecantOrder:
    code: str  # of the new bottle
    asked: Asked
    place_code: str
    reason: str = ""
    tare_ug: int | None = None
    expires_on: date | None = None
    preparation: Preparation | None = None
    booked_on: date | None = None


def decant(
    *, actor: Actor, bottle_code: str, order: DecantOrder, project: Project | None = None,
    operation_id: uuid.UUID | None = None, once: Once | None = None,
) -> str:  # fmt: skip
    """Fill a new bottle; return its code.

    The two lines stand in the books of both bottles, and the new one names its parent and the
    line. What is held, and the heel, stay in the parent. Raises NotFound, NotAllowed,
    InvalidValue, StateForbids for a bottle that is not usable, StockShort; then nothing has
    changed. Safe to repeat with the same operation id or claim.
    """
    require(actor, "stock.report")
    parent = find_bottle(bottle_code)
    check_day(order.booked_on)

    def body() -> str:
        place = _checked(parent, order)
        quantity = quantity_of(parent, order.asked)
        _check_least(parent, quantity)
        child = _new_bottle(parent, place, quantity, order)
        _fill(parent, child, quantity, order, actor, project, operation_id)
        _write_readings(parent, child, order, actor)
        return child.code

    def earlier(operation: uuid.UUID) -> str:
        line = Movement.objects.filter(operation=operation, kind="decant_in").first()
        if line is None:
            raise StateForbids("This operation id belongs to something else; take a new one.")
        return line.bottle.code

    return again_if_overtaken(
        lambda: write_once(body, operation_id=operation_id, once=once, earlier=earlier)
    )


def _checked(parent: Bottle, order: DecantOrder) -> Place:
    if parent.status != Bottle.Status.USABLE:
        raise StateForbids(f"{parent.code} is {parent.status}; nothing is filled from it.")
    if Bottle.objects.filter(code=order.code).exists():
        raise invalid("code", "bottle_exists", f"There is a bottle {order.code} already.")
    place = Place.objects.filter(code=order.place_code).first()
    if place is None:
        raise invalid("place", "unknown_place", f"There is no place {order.place_code!r}.")
    return place


def _check_least(parent: Bottle, quantity: Quantity) -> None:
    if quantity.amount < parent.least_dispensed:
        least = in_words(parent.measured_by, parent.least_dispensed)
        raise invalid("amount", "below_least", f"At least {least} can be measured out of it.")


def _new_bottle(parent: Bottle, place: Place, quantity: Quantity, order: DecantOrder) -> Bottle:
    day, made = order.booked_on or clock.today(), order.preparation
    if made is None:
        fields = {name: getattr(parent, name) for name in _INHERITED}
    else:
        fields = {name: getattr(parent, name) for name in _KEPT_BY_PREPARATION}
        fields |= {"form": _form_of(parent, made.form), "preparation": made.text}
        fields |= {**made.stabiliser, **made.fields}
    solvent = is_solvent(parent.form.substance)
    child = Bottle.objects.create(
        code=order.code, parent=parent, place=place, tare_ug=order.tare_ug,
        heel=heel_of(parent.measured_by, quantity.amount, is_solvent=solvent),
        least_dispensed=least_dispensed_of(parent.measured_by), received_on=day, opened_on=day,
        expires_on=order.expires_on or parent.expires_on, **fields,
    )  # fmt: skip
    Balance.objects.create(bottle=child)
    return child


def _form_of(parent: Bottle, form: dict[str, Any]) -> Form:
    made, _ = Form.objects.get_or_create(
        substance=parent.form.substance, label=form["label"], defaults=form
    )
    return made


def _fill(
    parent: Bottle, child: Bottle, quantity: Quantity, order: DecantOrder, actor: Actor,
    project: Project | None, operation_id: uuid.UUID | None,
) -> None:  # fmt: skip
    entered: dict[str, Any] = {
        "entered_amount": quantity.entered_amount, "entered_unit": quantity.entered_unit,
        "density_g_per_ml": quantity.density_g_per_ml, "density_source": quantity.density_source,
    }  # fmt: skip
    out = BookLine(
        bottle_id=parent.pk, kind="decant_out", on_hand_change=-quantity.amount,
        keep_back=parent.heel, amount_nmol=quantity.amount_nmol,
        reason=f"into {child.code}. {order.reason}".strip()[:160], **entered,
    )  # fmt: skip
    into = BookLine(
        bottle_id=child.pk, kind="decant_in", on_hand_change=quantity.amount,
        amount_nmol=None if order.preparation else quantity.amount_nmol,
        reason=f"from {parent.code}. {order.reason}".strip()[:160], **entered,
    )  # fmt: skip
    operation = write_lines(
        [out, into], actor=actor, project_id=project.pk if project else None,
        reason=order.reason, operation_id=operation_id, booked_on=order.booked_on,
    )  # fmt: skip
    line = Movement.objects.get(operation=operation, bottle=parent)
    Bottle.objects.filter(pk=child.pk).update(parent_movement=line)
    Bottle.objects.filter(pk=parent.pk, opened_on=None).update(
        opened_on=line.booked_on, version=F("version") + 1
    )


def _write_readings(parent: Bottle, child: Bottle, order: DecantOrder, actor: Actor) -> None:
    """What was measured on the parent holds for the same content; of a preparation the new one."""
    if order.preparation is None:
        found = latest_readings([parent.pk])
        readings = [(kind, value, day) for (_, kind), (value, day) in found.items()]
    elif order.preparation.water_ppm is not None:
        readings = [(Reading.Kind.WATER_PPM.value, order.preparation.water_ppm, child.received_on)]
    else:
        readings = []
    Reading.objects.bulk_create(
        Reading(
            bottle=child, kind=kind, value=value, read_on=day, actor_code=actor.code,
            method="" if order.preparation else f"on {parent.code}", recorded_at=clock.now(),
        )
        for kind, value, day in readings
    )  # fmt: skip
