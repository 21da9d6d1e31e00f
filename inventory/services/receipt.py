"""Take bottles into the stock."""

import uuid
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal
from typing import Any

from inventory import locks
from inventory.models import Balance, Bottle, Form, Place, Reading, Substance
from inventory.quantities import density_used, moles_nmol
from inventory.services.book import BookLine, write_lines
from labplan.base import clock
from labplan.base.rights import Actor, require
from labplan.chemistry.reference import find_by_key

# Common practice: what cannot be got out of a bottle.
HEEL_SHARE_OF_SOLVENT = Decimal("0.02")
HEEL_LEAST_SOLVENT_NL = 5_000_000
HEEL_LIQUID_REAGENT_NL = 200_000
HEEL_SOLID_UG = 20_000
# Common practice: what a syringe still measures; a balance is the laboratory's own affair.
LEAST_VOLUME_NL = 50_000


@dataclass(frozen=True)
class BottleReceipt:
    """A bottle as it comes in; `amount` in the base unit, `entered_*` as on the delivery note."""

    code: str
    substance: Substance
    form: dict[str, Any]  # fields of Form beside the substance
    place: Place
    measured_by: str
    amount: int
    entered_amount: str
    entered_unit: str
    fields: dict[str, Any] = field(default_factory=dict)  # fields of Bottle
    readings: tuple[tuple[str, Decimal, date], ...] = ()  # (kind, value, read on)


def receive_bottles(
    receipts: Sequence[BottleReceipt], *, actor: Actor, reason: str,
    operation_id: uuid.UUID | None = None,
) -> int:  # fmt: skip
    """Create bottles, their balances and the first line of each book, in the open transaction.

    Raises NotAllowed. The caller has checked that codes are new and values are sound. An operation
    id that is in the book already raises IntegrityError, as write_lines does.
    """
    locks.require_transaction()
    require(actor, "stock.receive")
    forms = _forms(receipts)
    bottles = Bottle.objects.bulk_create(
        [_bottle(receipt, forms[_form_key(receipt)]) for receipt in receipts], batch_size=500
    )
    Balance.objects.bulk_create(
        [
            Balance(bottle=bottle, is_usable=bottle.status == Bottle.Status.USABLE)
            for bottle in bottles
        ],
        batch_size=500,
    )
    _write_readings(bottles, receipts, actor)
    write_lines(
        [_receipt_line(b, receipt) for b, receipt in zip(bottles, receipts, strict=True)],
        actor=actor, project_id=None, reason=reason, operation_id=operation_id,
    )  # fmt: skip
    return len(bottles)


def heel_of(measured_by: str, amount: int, *, is_solvent: bool) -> int:
    """What cannot be dispensed from a bottle of this size, in its base unit.

    The larger of 2 % and 5 mL of a solvent bottle, 0.2 mL of a liquid reagent, 20 mg of a solid.
    """
    if measured_by == Bottle.MeasuredBy.MASS:
        return min(HEEL_SOLID_UG, amount)
    if measured_by == Bottle.MeasuredBy.COUNT:
        return 0
    if not is_solvent:
        return min(HEEL_LIQUID_REAGENT_NL, amount)
    return min(max(HEEL_LEAST_SOLVENT_NL, int(amount * HEEL_SHARE_OF_SOLVENT)), amount)


def is_solvent(substance: Substance) -> bool:
    """Whether the packaged table lists it as a solvent."""
    packaged = find_by_key(substance.code)
    return packaged is not None and "solvent" in packaged.tags


def least_dispensed_of(measured_by: str) -> int:
    """The least that is set aside or decanted, in the base unit; a bottle may say otherwise."""
    return LEAST_VOLUME_NL if measured_by == Bottle.MeasuredBy.VOLUME else 1


def _form_key(receipt: BottleReceipt) -> tuple[int, str]:
    return receipt.substance.pk, str(receipt.form["label"])


def _forms(receipts: Sequence[BottleReceipt]) -> dict[tuple[int, str], Form]:
    substances = {receipt.substance.pk for receipt in receipts}
    known = {(f.substance_id, f.label): f for f in Form.objects.filter(substance__in=substances)}
    for receipt in receipts:
        key = _form_key(receipt)
        if key not in known:
            known[key] = Form.objects.create(substance=receipt.substance, **receipt.form)
    return known


def _bottle(receipt: BottleReceipt, form: Form) -> Bottle:
    return Bottle(
        code=receipt.code,
        form=form,
        place=receipt.place,
        measured_by=receipt.measured_by,
        heel=heel_of(receipt.measured_by, receipt.amount, is_solvent=is_solvent(receipt.substance)),
        **{"least_dispensed": least_dispensed_of(receipt.measured_by), **receipt.fields},
    )


def _write_readings(
    bottles: Sequence[Bottle], receipts: Sequence[BottleReceipt], actor: Actor
) -> None:
    recorded_at = clock.now()
    Reading.objects.bulk_create(
        Reading(
            bottle=bottle, kind=kind, value=value, read_on=read_on, actor_code=actor.code,
            recorded_at=recorded_at,
        )
        for bottle, receipt in zip(bottles, receipts, strict=True)
        for kind, value, read_on in receipt.readings
    )  # fmt: skip


def _receipt_line(bottle: Bottle, receipt: BottleReceipt) -> BookLine:
    density, source = density_used(bottle)
    return BookLine(
        bottle_id=bottle.pk,
        kind="receipt",
        on_hand_change=receipt.amount,
        entered_amount=receipt.entered_amount,
        entered_unit=receipt.entered_unit,
        density_g_per_ml=density,
        density_source=source,
        amount_nmol=moles_nmol(bottle, receipt.amount),
    )
