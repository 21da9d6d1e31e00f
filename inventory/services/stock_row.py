"""One line of a stock list -> one bottle to be received."""

import re
from datetime import date
from decimal import Decimal
from typing import Any

from inventory.models import Bottle, Form, Place, Substance
from inventory.models.checks import LARGEST_AMOUNT
from inventory.services.csv_rows import Row
from inventory.services.receipt import BottleReceipt
from inventory.services.substances import SubstanceFinder
from labplan.base import clock
from labplan.chemistry.forms import form_label
from labplan.chemistry.masses import is_part_of_formula, molar_mass_of_formula

PLACE_COLUMNS = ("code", "name", "is_locked", "temperature_c")
STOCK_COLUMNS = (
    "code", "substance", "cas", "smiles", "kind",
    "form", "hydrate_water", "solution_basis", "solution_value", "solution_solvent",
    "solution_temperature_c", "active_share_pct",
    "amount", "unit", "assay_pct", "assay_of", "assay_kind",
    "density_g_per_ml", "density_temperature_c", "water_ppm", "water_read_on", "activated_on",
    "stabiliser", "stabiliser_amount_pct", "stabiliser_basis",
    "lot", "supplier", "place", "received_on", "opened_on", "expires_on", "status", "note",
)  # fmt: skip
STOCK_NEEDED = frozenset({"code", "substance", "amount", "unit", "place", "received_on"})
# unit -> (how the bottle is measured, base units in one)
UNITS = {
    "mg": ("mass", 1_000),
    "g": ("mass", 1_000_000),
    "kg": ("mass", 1_000_000_000),
    "uL": ("volume", 1_000),
    "mL": ("volume", 1_000_000),
    "L": ("volume", 1_000_000_000),
    "pieces": ("count", 1),
}
ACTIVATION_C = Decimal(300)
_CODE = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,23}")


def read_receipt(
    row: Row, places: dict[str, Place], finder: SubstanceFinder
) -> BottleReceipt | None:
    """Check one line; note every error on the row and return None if there was one."""
    before = len(row.errors.found)
    code = read_code(row)
    measured_by, amount = _amount(row)
    place = places.get(row.text("place"))
    if place is None and row.text("place"):
        row.error("place", "unknown_place", f"There is no place {row.text('place')!r}.")
    form = read_form(row, finder)
    fields = _bottle_fields(row)
    readings = _readings(row)
    substance = finder.find(row)
    if substance is not None:
        _check_strength(row, substance)
        _check_assay(row, substance)
        if row.text("cas") != substance.cas:
            form["cas"] = row.text("cas")
        is_sound = len(row.errors.found) == before
        if is_sound and substance.kind == Substance.Kind.DEFINED and measured_by == "count":
            row.error("unit", "not_countable", "A compound is weighed or measured, not counted.")
    _check_days(fields, row)
    if len(row.errors.found) > before or substance is None or place is None:
        return None
    return BottleReceipt(
        code=code, substance=substance, form=form, place=place,
        measured_by=measured_by, amount=amount,
        entered_amount=row.text("amount"), entered_unit=row.text("unit"),
        fields=fields, readings=readings,
    )  # fmt: skip


def read_code(row: Row) -> str:
    code = row.text("code")
    if code and not _CODE.fullmatch(code):
        row.error("code", "bad_code", "1 to 24 letters, digits, dots, dashes or underscores.")
    return code


def temperature_c(row: Row, column: str) -> Decimal | None:
    return row.decimal(column, lowest="-273.1", highest="999.9", places=1)


def _check_strength(row: Row, substance: Substance) -> None:
    """A solution of a defined substance must say how many moles are in it, or nothing is sized."""
    basis = row.text("solution_basis")
    if row.text("form") != "solution" or substance.molar_mass_g_per_mol is None:
        return
    if basis in ("equiv_per_g", "equiv_per_l"):
        row.error(
            "solution_basis", "equivalents_say_no_moles",
            f"{substance.name} has a molar mass: give its strength by mass or as mol_per_l.",
        )  # fmt: skip
    if basis in ("pct_w_v", "mol_per_l") and not row.text("density_g_per_ml"):
        row.error(
            "density_g_per_ml", "missing",
            "A strength by volume needs the density of the solution.",
        )  # fmt: skip


# A label of 46 to 48 % on the etherate counts BF3; taken as etherate it would double the dose.
_COUNTS_A_PART = {"boron-trifluoride-diethyl-etherate": ("BF3", Decimal(60))}


def _check_days(fields: dict[str, Any], row: Row) -> None:
    received, opened = fields["received_on"], fields["opened_on"]
    if received and opened and opened < received:
        row.error("opened_on", "before_receipt", "It was opened before it came.")


def _check_assay(row: Row, substance: Substance) -> None:
    """An assay counts the whole, or a part that the compound has, and never more than all of it."""
    given = row.text("assay_pct").replace(".", "", 1)
    assay = Decimal(row.text("assay_pct")) if given.isascii() and given.isdigit() else None
    of = row.text("assay_of") or "as_is"
    part, below = _COUNTS_A_PART.get(substance.code, ("", Decimal(0)))
    if assay is not None and of == "as_is" and assay < below:
        row.error(
            "assay_of", "missing",
            f"{assay} % of {substance.name} most likely counts {part}: say assay_of={part}, or the "
            "assay of the compound itself.",
        )  # fmt: skip
    if assay is None or of in ("as_is", "anhydrous", "hydrate") or not substance.formula:
        return
    if not is_part_of_formula(of, substance.formula):
        row.error("assay_of", "not_a_part", f"{of} is no part of {substance.formula}.")
        return
    highest = 100 * molar_mass_of_formula(of) / float(substance.molar_mass_g_per_mol or 1)
    if float(assay) > highest * 1.001:
        row.error("assay_pct", "more_than_all", f"At most {highest:.1f} % of {of} can be in it.")


def _amount(row: Row) -> tuple[str, int]:
    unit = row.text("unit")
    row.within("amount", 40)
    value = row.decimal("amount", lowest="0", highest="1e15", places=9)
    if unit and unit not in UNITS:
        row.error("unit", "unknown_unit", f"{unit!r} is not one of: {', '.join(UNITS)}.")
    if value is None or unit not in UNITS:
        return "mass", 0
    measured_by, factor = UNITS[unit]
    base = value * factor
    if base != base.to_integral_value():
        row.error("amount", "too_many_digits", "More digits than micrograms or nanolitres hold.")
    elif not 1 <= base <= LARGEST_AMOUNT:
        row.error("amount", "out_of_range", "The amount must be above 0 and below 1 Gg.")
    return measured_by, int(base)


def read_form(row: Row, finder: SubstanceFinder) -> dict[str, Any]:
    """The fields of a Form, from the columns of a stock file."""
    kind = row.choice("form", ("", *Form.Kind.values)) or "neat"
    fields: dict[str, Any] = {"kind": kind}
    if kind == "hydrate":
        fields["hydrate_water"] = _needed(
            row, "hydrate_water", lowest="0.001", highest="30", places=3
        )
    if kind in ("solution", "loaded"):
        fields |= _strength(row, finder)
    if kind == "anomer_mixture":
        fields["active_share_pct"] = _needed(
            row, "active_share_pct", lowest="0.001", highest="100", places=3
        )
    solvent = fields.get("solution_solvent")
    label = form_label(
        kind,
        hydrate_water=fields.get("hydrate_water"),
        basis=fields.get("solution_basis", ""),
        value=fields.get("solution_value"),
        solvent_name=solvent.name if solvent else None,
        active_share_pct=fields.get("active_share_pct"),
    )
    return {**fields, "label": label[:120]}


def _strength(row: Row, finder: SubstanceFinder) -> dict[str, Any]:
    basis = row.choice("solution_basis", tuple(Form.SolutionBasis.values))
    highest = "100" if basis == "pct_w_w" else "10000"
    return {
        "solution_basis": basis,
        "solution_value": _needed(row, "solution_value", lowest="0.0001", highest=highest),
        "solution_solvent": finder.find_solvent(row),
        "solution_temperature_c": temperature_c(row, "solution_temperature_c"),
    }


def _needed(row: Row, column: str, **bounds: Any) -> Decimal | None:
    value = row.decimal(column, **bounds)
    if value is None and not row.text(column):
        row.error(column, "missing", f"A {row.text('form')} needs this value.")
    return value


def _bottle_fields(row: Row) -> dict[str, Any]:
    fields = {
        "lot": row.within("lot", 60),
        "supplier": row.within("supplier", 80),
        "assay_pct": row.decimal("assay_pct", lowest="0.0001", highest="100"),
        "assay_of": _assay_of(row),
        "assay_kind": row.choice("assay_kind", ("", *Bottle.AssayKind.values)) or "unspecified",
        "density_g_per_ml": row.decimal("density_g_per_ml", lowest="0.1", highest="25"),
        "density_temperature_c": temperature_c(row, "density_temperature_c"),
        "received_on": _past_day(row, "received_on"),
        "opened_on": _past_day(row, "opened_on"),
        "expires_on": row.day("expires_on"),
        "status": row.choice("status", ("", *Bottle.Status.values)) or "usable",
        "note": row.within("note", 200),
    }
    return fields | read_stabiliser(row)


def _assay_of(row: Row) -> str:
    of = row.within("assay_of", 40) or "as_is"
    if of not in ("as_is", "anhydrous", "hydrate"):
        try:
            molar_mass_of_formula(of)
        except ValueError:
            row.error(
                "assay_of", "not_a_formula",
                "Give as_is, anhydrous, hydrate, or the formula the assay counts, such as BF3.",
            )  # fmt: skip
    return of


def read_stabiliser(row: Row) -> dict[str, Any]:
    """`none`, a name, `unknown`, or nothing where no stabiliser is in question."""
    name = row.within("stabiliser", 60)
    state = {"": "not_applicable", "none": "none", "unknown": "unknown"}.get(name.lower(), "known")
    return {
        "stabiliser_state": state,
        "stabiliser_name": name if state == "known" else "",
        "stabiliser_amount_pct": row.decimal(
            "stabiliser_amount_pct", lowest="0", highest="100", places=6
        ),
        "stabiliser_basis": row.choice("stabiliser_basis", ("", "w/w", "v/v")),
    }


def _past_day(row: Row, column: str) -> date | None:
    day = row.day(column)
    if day is not None and day > clock.today():
        row.error(column, "in_the_future", f"{day} has not come yet.")
    return day


def _readings(row: Row) -> tuple[tuple[str, Decimal, Any], ...]:
    found = []
    water = row.decimal("water_ppm", lowest="0", highest="1000000")
    read_on, activated = _past_day(row, "water_read_on"), _past_day(row, "activated_on")
    if water is not None:
        if read_on is None and not row.text("water_read_on"):
            row.error("water_read_on", "missing", "A water reading needs its date.")
        found.append(("water_ppm", water, read_on))
    if activated is not None:
        found.append(("activation_c", ACTIVATION_C, activated))
    return tuple(found)
