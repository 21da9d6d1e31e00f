"""From what a person weighed or measured to the base unit of a bottle, and back to words.

The one place where the stock turns mass into volume: by the density of the bottle's label, else
of the substance, and it says which.
"""

from dataclasses import dataclass
from decimal import Decimal

from inventory.content import content_of, density_of
from inventory.errors import NotConvertible
from inventory.models import Bottle
from inventory.models.checks import LARGEST_AMOUNT
from labplan.base.errors import FieldProblem, InvalidValue
from labplan.chemistry.amounts import amount_mmol, mass_mg, mass_mg_of_volume, volume_ml

# field of the API -> (how such an amount is measured, the unit in words, base units in one)
AMOUNT_FIELDS = {
    "mass_mg": ("mass", "mg", 1_000),
    "volume_ml": ("volume", "mL", 1_000_000),
    "pieces": ("count", "pieces", 1),
}
# how a bottle is measured -> (the unit people write, base units in one)
WRITTEN_UNITS = {kind: (unit, factor) for kind, unit, factor in AMOUNT_FIELDS.values()}


@dataclass(frozen=True)
class Asked:
    """An amount as a person gave it: `field` of AMOUNT_FIELDS, or amount_mmol."""

    field: str
    value: Decimal

    @property
    def unit(self) -> str:
        return AMOUNT_FIELDS[self.field][1] if self.field in AMOUNT_FIELDS else "mmol"

    @property
    def measured_by(self) -> str:
        return AMOUNT_FIELDS[self.field][0] if self.field in AMOUNT_FIELDS else ""

    @property
    def text(self) -> str:
        return plain(self.value)


@dataclass(frozen=True)
class Quantity:
    """An amount of one bottle in its base unit, with what was entered and how it was converted."""

    amount: int
    entered_amount: str
    entered_unit: str
    density_g_per_ml: Decimal | None
    density_source: str
    amount_nmol: int | None


def quantity_of(bottle: Bottle, asked: Asked, *, field: str = "amount") -> Quantity:
    """What `asked` is of this bottle, in its base unit. Raises InvalidValue and NotConvertible."""
    density, source = density_used(bottle)
    amount = _base_units(bottle, asked, field)
    if not 1 <= amount <= LARGEST_AMOUNT:
        raise _refused(field, "out_of_range", "The amount must be above 0 and below 1 Gg.")
    return Quantity(amount, asked.text, asked.unit, density, source, moles_nmol(bottle, amount))


def own_quantity(bottle: Bottle, amount: int) -> Quantity:
    """An amount that is known in the bottle's base unit already, as if it had been typed."""
    unit, factor = WRITTEN_UNITS[bottle.measured_by]
    density, source = density_used(bottle)
    text = plain(Decimal(amount) / factor)
    return Quantity(amount, text, unit, density, source, moles_nmol(bottle, abs(amount)))


def density_used(bottle: Bottle) -> tuple[Decimal | None, str]:
    """The density [g/mL] an amount of this bottle is converted with, and where it is from."""
    density = density_of(bottle)
    if density is None:
        return None, ""
    if bottle.density_g_per_ml is not None:
        return Decimal(str(density)), "label" + _at(bottle.density_temperature_c)
    substance = bottle.form.substance
    source = substance.density_source or "table of substances"
    return Decimal(str(density)), (source + _at(substance.density_temperature_c))[:120]


def moles_nmol(bottle: Bottle, amount: int) -> int | None:
    """The moles of the substance at the assay known now; None where nothing can be said."""
    content = content_of(bottle)
    if content is None:
        return None
    if bottle.measured_by == Bottle.MeasuredBy.MASS:
        mass = amount / 1000
    elif bottle.measured_by == Bottle.MeasuredBy.VOLUME and content.density_g_per_ml:
        mass = mass_mg_of_volume(amount / 1_000_000, content.density_g_per_ml)
    else:
        return None
    nmol = round(amount_mmol(mass, content) * 1_000_000)
    return nmol if nmol <= LARGEST_AMOUNT else None


def converted(bottle: Bottle, amount: int, *, given_by: str, wanted_by: str) -> int | None:
    """An amount of the content in another measure's base unit; None where nothing says how."""
    if given_by == wanted_by:
        return amount
    density = density_of(bottle)
    if density is None or "count" in (given_by, wanted_by):
        return None
    if wanted_by == "volume":
        return round(volume_ml(amount / 1000, density) * 1_000_000)
    return round(mass_mg_of_volume(amount / 1_000_000, density) * 1_000)


def in_words(measured_by: str, amount: int) -> str:
    """`2.5 mL` for 2,500,000 nanolitres."""
    unit, factor = WRITTEN_UNITS[measured_by]
    return f"{plain(Decimal(amount) / factor)} {unit}"


def plain(value: Decimal) -> str:
    return f"{value.normalize():f}" if value else "0"


def _at(temperature_c: Decimal | None) -> str:
    return f" at {temperature_c:g} °C" if temperature_c is not None else ""


def _base_units(bottle: Bottle, asked: Asked, field: str) -> int:
    if asked.field == "amount_mmol":
        return _of_moles(bottle, float(asked.value), field)
    kind, unit, factor = AMOUNT_FIELDS[asked.field]
    base = asked.value * factor
    if base != base.to_integral_value():
        raise _refused(field, "too_many_digits", f"More digits of {unit} than the base unit holds.")
    amount = converted(bottle, int(base), given_by=kind, wanted_by=bottle.measured_by)
    if amount is None:
        own = WRITTEN_UNITS[bottle.measured_by][0]
        raise _not_convertible(field, bottle, f"give the amount in {own}")
    return amount


def _of_moles(bottle: Bottle, mmol: float, field: str) -> int:
    content = content_of(bottle)
    try:
        mass = mass_mg(mmol, content) if content else None
    except ValueError:
        mass = None  # a solution by volume without its density
    amount = None
    if mass is not None:
        amount = converted(
            bottle, round(mass * 1000), given_by="mass", wanted_by=bottle.measured_by
        )
    if amount is None:
        raise _not_convertible(field, bottle, "its label does not say enough to count in mmol")
    return amount


def _not_convertible(field: str, bottle: Bottle, advice: str) -> NotConvertible:
    detail = f"Bottle {bottle.code} is measured by {bottle.measured_by} and {advice}."
    return NotConvertible(detail, errors=(FieldProblem(field, "not_convertible", detail),))


def _refused(field: str, code: str, detail: str) -> InvalidValue:
    return InvalidValue(detail, errors=(FieldProblem(field, code, detail),))
