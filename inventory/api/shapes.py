"""The stock as JSON: units in the names, amounts as decimal strings."""

from decimal import Decimal
from typing import Any

from inventory.models import (
    Bottle,
    Hold,
    Movement,
    Notice,
    Place,
    Quota,
    Reading,
    Reservation,
    Substance,
)
from inventory.quantities import AMOUNT_FIELDS
from inventory.services import CountsTaken, Reserved, Used
from inventory.services.counting import WORDS
from inventory.services.facts import Counted
from inventory.services.quotas import claimed_of
from labplan.base.preconditions import etag_of

# how a bottle is measured -> (name of the amount, base units in one)
AMOUNT_NAMES = {kind: (name, factor) for name, (kind, _, factor) in AMOUNT_FIELDS.items()}


def amount(measured_by: str, base_units: int, prefix: str = "") -> dict[str, str]:
    """`{"usable_mass_mg": "2500"}` for 2,500,000 micrograms."""
    name, factor = AMOUNT_NAMES[measured_by]
    return {f"{prefix}{name}": decimal_text(Decimal(base_units) / factor)}


def decimal_text(value: Decimal | None) -> str | None:
    if value is None:
        return None
    return f"{value.normalize():f}" if value else "0"


def milligrams(mass_ug: int | None) -> str | None:
    return decimal_text(Decimal(mass_ug) / 1000) if mass_ug is not None else None


# The version that an edit names; a bottle's changes with its book too, as what is shown does.


def substance_etag(substance: Substance) -> str:
    return etag_of("substance", substance.code, substance.version)


def bottle_etag(bottle: Bottle) -> str:
    return etag_of("bottle", bottle.code, bottle.version + bottle.balance.seq)


def reservation_etag(reservation: Reservation) -> str:
    return etag_of("reservation", str(reservation.code), reservation.version)


def show_substance(substance: Substance) -> dict[str, Any]:
    return {
        "code": substance.code,
        "kind": substance.kind,
        "name": substance.name,
        "cas": substance.cas or None,
        "smiles": substance.smiles or None,
        "inchikey": substance.inchikey,
        "formula": substance.formula or None,
        "molar_mass_g_per_mol": decimal_text(substance.molar_mass_g_per_mol),
        "density_g_per_ml": decimal_text(substance.density_g_per_ml),
        "density_temperature_c": decimal_text(substance.density_temperature_c),
        "density_source": substance.density_source or None,
        "minimum": (
            amount(substance.minimum_measured_by, substance.minimum)
            if substance.minimum is not None
            else None
        ),
    }


def show_bottle(bottle: Bottle) -> dict[str, Any]:
    """What everybody may see: what is free, not who holds what."""
    return {
        "code": bottle.code,
        "substance": bottle.form.substance.code,
        "name": bottle.form.substance.name,
        "form": bottle.form.label,
        "measured_by": bottle.measured_by,
        **amount(bottle.measured_by, bottle.balance.on_hand, "on_hand_"),
        **amount(bottle.measured_by, bottle.usable, "usable_"),
        **amount(bottle.measured_by, bottle.least_dispensed, "least_dispensed_"),
        "tare_mg": milligrams(bottle.tare_ug),
        "parent": bottle.parent.code if bottle.parent else None,
        "preparation": bottle.preparation or None,
        "assay_pct": decimal_text(bottle.assay_pct),
        "assay_of": bottle.assay_of,
        "assay_kind": bottle.assay_kind,
        "density_g_per_ml": decimal_text(bottle.density_g_per_ml),
        "stabiliser": bottle.stabiliser_name or bottle.stabiliser_state,
        "place": bottle.place.code,
        "lot": bottle.lot or None,
        "received_on": bottle.received_on.isoformat(),
        "opened_on": bottle.opened_on.isoformat() if bottle.opened_on else None,
        "expires_on": bottle.expires_on.isoformat() if bottle.expires_on else None,
        "status": bottle.status,
    }


def show_place(place: Place) -> dict[str, Any]:
    return {
        "code": place.code,
        "name": place.name,
        "is_locked": place.is_locked,
        "temperature_c": decimal_text(place.temperature_c),
    }


def show_movement(movement: Movement, measured_by: str) -> dict[str, Any]:
    return {
        "seq": movement.seq,
        "kind": movement.kind,
        **amount(measured_by, movement.on_hand_change, "on_hand_change_"),
        **amount(measured_by, movement.held_change, "held_change_"),
        **amount(measured_by, movement.on_hand_after, "on_hand_after_"),
        **amount(measured_by, movement.held_after, "held_after_"),
        "entered": f"{movement.entered_amount} {movement.entered_unit}".strip(),
        "density_g_per_ml": decimal_text(movement.density_g_per_ml),
        "density_source": movement.density_source or None,
        "amount_mmol": decimal_text(
            Decimal(movement.amount_nmol) / 1_000_000 if movement.amount_nmol is not None else None
        ),
        "operation": str(movement.operation),
        "project": movement.project.code if movement.project else None,
        "actor": movement.actor_code,
        "reason": movement.reason,
        "booked_on": movement.booked_on.isoformat(),
        "recorded_at": movement.recorded_at.isoformat(),
    }


def show_reservation(reservation: Reservation) -> dict[str, Any]:
    return {
        "code": str(reservation.code),
        "project": reservation.project.code,
        "actor": reservation.actor_code,
        "purpose": reservation.purpose,
        "state": reservation.state,
        "is_firm": reservation.is_firm,
        "expires_on": reservation.expires_on.isoformat(),
        "created_at": reservation.created_at.isoformat(),
        "holds": [
            show_hold(hold) for hold in sorted(reservation.holds.all(), key=lambda h: h.line)
        ],
    }


def show_hold(hold: Hold) -> dict[str, Any]:
    measured_by = hold.bottle.measured_by
    return {
        "line": hold.line,
        "bottle": hold.bottle.code,
        "state": hold.state,
        **amount(measured_by, hold.amount),
        **amount(measured_by, hold.used, "used_"),
        **amount(measured_by, hold.given_back, "given_back_"),
    }


def show_made(made: Reserved) -> dict[str, Any]:
    return {
        **show_reservation(made.reservation),
        "shortfalls": [{"line": s.line, "detail": s.detail} for s in made.shortfalls],
    }


def show_used(used: Used) -> dict[str, Any]:
    return {**show_reservation(used.reservation), "cancelled_holds": used.cancelled_holds}


def show_reading(reading: Reading) -> dict[str, Any]:
    """What was measured; who did it is no business of other projects."""
    return {
        "kind": reading.kind,
        "value": decimal_text(reading.value),
        "method": reading.method or None,
        "read_on": reading.read_on.isoformat(),
        "recorded_at": reading.recorded_at.isoformat(),
    }


def show_counts(taken: CountsTaken) -> dict[str, Any]:
    return {
        "lines": [_show_counted(counted) for counted in taken.counted],
        "cancelled_holds": taken.cancelled_holds,
    }


def _show_counted(counted: Counted) -> dict[str, Any]:
    measured_by = counted.bottle.measured_by
    return {
        "bottle": counted.bottle.code,
        **amount(measured_by, counted.book, "book_"),
        **amount(measured_by, counted.found, "found_"),
        **amount(measured_by, counted.uncertainty, "uncertainty_"),
        "verdict": counted.verdict,
        "detail": WORDS[counted.verdict],
    }


def show_quota(quota: Quota) -> dict[str, Any]:
    claimed = claimed_of(quota)
    return {
        "project": quota.project.code,
        "substance": quota.substance.code,
        "starts_on": quota.starts_on.isoformat(),
        "ends_on": quota.ends_on.isoformat(),
        **amount(quota.measured_by, quota.amount),
        **amount(quota.measured_by, claimed, "claimed_"),
        **amount(quota.measured_by, max(quota.amount - claimed, 0), "left_"),
        "reason": quota.reason,
    }


def show_notice(notice: Notice) -> dict[str, Any]:
    return {
        "id": notice.pk,
        "kind": notice.kind,
        "project": notice.project.code,
        "bottle": notice.bottle_code,
        "reservation": str(notice.reservation_code),
        "line": notice.line,
        "detail": notice.detail,
        "created_at": notice.created_at.isoformat(),
        "read_at": notice.read_at.isoformat() if notice.read_at else None,
    }
