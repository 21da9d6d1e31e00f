"""The shelf as it is now: free amounts after what is held, with what a plan has to know."""

from collections.abc import Collection
from dataclasses import dataclass
from datetime import date
from decimal import Decimal

from django.db.models import Q

from inventory.content import content_of, density_of
from inventory.models import Bottle, Form, Reading
from labplan.base.rights import Actor, require
from labplan.chemistry.amounts import Content


@dataclass(frozen=True)
class BottleOnShelf:
    """One bottle with its balance and latest readings. Amounts in its base unit."""

    code: str
    substance: str
    name: str
    cas: str
    smiles: str
    inchikey: str | None
    content: Content | None
    form_label: str
    measured_by: str
    on_hand: int
    held: int
    usable: int
    place: str
    place_name: str
    lot: str
    status: str
    expires_on: date | None
    opened_on: date | None
    stabiliser_state: str
    stabiliser_name: str
    water_ppm: float | None
    water_read_on: date | None
    activated_on: date | None
    density_g_per_ml: float | None
    loading_equiv_per_l: float | None  # of a resin
    solvent: str | None  # of a solution
    solvent_name: str | None


def shelf_snapshot(
    *,
    actor: Actor,
    inchikeys: Collection[str],
    inchikey_blocks: Collection[str],
    substances: Collection[str],
) -> tuple[BottleOnShelf, ...]:
    """All bottles of these substances, whatever their state.

    By InChIKey, by its first block (to see what must not be mistaken for it), or by code.
    """
    require(actor, "stock.view")
    wanted = Q(form__substance__inchikey__in=list(inchikeys))
    wanted |= Q(form__substance__code__in=list(substances))
    for block in inchikey_blocks:
        wanted |= Q(form__substance__inchikey__startswith=block)
    bottles = list(
        Bottle.objects.filter(wanted)
        .select_related("form__substance", "form__solution_solvent", "balance", "place")
        .order_by("code")
    )
    readings = latest_readings([bottle.pk for bottle in bottles])
    return tuple(_on_shelf(bottle, readings) for bottle in bottles)


Readings = dict[tuple[int, str], tuple[Decimal, date]]


def latest_readings(bottle_ids: list[int]) -> Readings:
    """(bottle, kind) -> value and day of the newest reading of that kind."""
    rows = Reading.objects.filter(bottle__in=bottle_ids).order_by("read_on", "id")
    return {
        (bottle_id, kind): (value, read_on)
        for bottle_id, kind, value, read_on in rows.values_list(
            "bottle_id", "kind", "value", "read_on"
        )
    }


def _on_shelf(bottle: Bottle, readings: Readings) -> BottleOnShelf:
    balance, substance = bottle.balance, bottle.form.substance
    dissolved_in = bottle.form.solution_solvent
    water = readings.get((bottle.pk, Reading.Kind.WATER_PPM))
    activation = readings.get((bottle.pk, Reading.Kind.ACTIVATION_C))
    return BottleOnShelf(
        code=bottle.code, substance=substance.code, name=substance.name,
        cas=bottle.form.cas or substance.cas,
        smiles=substance.smiles,
        inchikey=substance.inchikey, content=content_of(bottle), form_label=bottle.form.label,
        measured_by=bottle.measured_by, on_hand=balance.on_hand, held=balance.held,
        usable=max(0, balance.on_hand - balance.held - bottle.heel),
        place=bottle.place.code, place_name=bottle.place.name, lot=bottle.lot,
        status=bottle.status, expires_on=bottle.expires_on, opened_on=bottle.opened_on,
        stabiliser_state=bottle.stabiliser_state, stabiliser_name=bottle.stabiliser_name,
        water_ppm=float(water[0]) if water else None,
        water_read_on=water[1] if water else None,
        activated_on=activation[1] if activation else None,
        density_g_per_ml=density_of(bottle),
        loading_equiv_per_l=_loading(bottle.form),
        solvent=dissolved_in.code if dissolved_in else None,
        solvent_name=dissolved_in.name if dissolved_in else None,
    )  # fmt: skip


def _loading(form: Form) -> float | None:
    """Equivalents a litre of a resin, where its label gives that."""
    if form.kind != Form.Kind.LOADED or form.solution_basis != Form.SolutionBasis.EQUIV_PER_L:
        return None
    return float(form.solution_value) if form.solution_value else None
