"""What all stages share: needs of substances, salts and solvents, yields, ions."""

from typing import Any

from labplan.chemistry.coupling import Target
from labplan.chemistry.masses import adduct_mz
from labplan.chemistry.reference import find_by_inchikey, find_by_key
from labplan.chemistry.structures import Structure
from labplan.planning.figures import in_sentence
from labplan.planning.sizing import Need
from labplan.planning.values import Charge, Ion

WorkUp = dict[str, Any]  # the work_up of a method

MOLAR_VOLUME_25C_L_PER_MOL = 24.465  # ideal gas at 25 °C and 101.325 kPa
BICARBONATE_G_PER_MOL = 84.006
WATER_SOLUBLE_CARBONS = 4
LOW_BOILING_C = 150.0


def readable(key: str) -> str:
    """The name of a packaged substance."""
    packaged = find_by_key(key)
    return in_sentence(packaged.name) if packaged else key.replace("-", " ")


def bulk_need(
    key: str,
    role: str,
    substance: str,
    *,
    group: str = "work-up",
    mass_mg: float | None = None,
    volume_ml: float | None = None,
    outward: bool = False,
) -> Need:
    """A salt by mass or a solvent by volume, of any fit bottle."""
    return Need(
        key=key,
        role=role,
        group=group,
        substances=(substance,),
        name=readable(substance),
        bulk_mass_mg=mass_mg,
        bulk_volume_ml=volume_ml,
        outward=outward,
    )


def structure_need(
    role: str, name: str | None, structure: Structure, amount_mmol: float, *, equivalents: float
) -> Need:
    """A donor or an acceptor: any fit bottle of this very structure."""
    return Need(
        key=role,
        role=role,
        group="reaction",
        substances=(),
        name=name or structure.smiles,
        inchikey=structure.inchikey,
        amount_mmol=amount_mmol,
        equivalents_planned=equivalents,
        equivalents_of="donor",
    )


def extraction_volume_ml(work_up: WorkUp, aqueous_ml: float) -> float:
    """Solvent of all extractions together."""
    return aqueous_ml * float(work_up["extraction_volume_share"]) * int(work_up["extractions"])


def extraction_need(solvent: str, volume_ml: float) -> Need:
    return bulk_need("extraction_solvent", "extraction", solvent, volume_ml=volume_ml, outward=True)


def brine_salt_need(work_up: WorkUp, brine_ml: float) -> Need:
    return bulk_need(
        "brine_salt",
        "brine",
        work_up["brine_salt"],
        mass_mg=brine_ml * float(work_up["brine_g_per_ml_water"]) * 1000,
    )


def acceptor_carbons(target: Target) -> int:
    """Carbon atoms of the alcohol: what decides whether it, or its glycoside, likes water."""
    return sum(letter in "Cc" for letter in target.acceptor.smiles)


def leaves_in_work_up(target: Target) -> bool:
    """Whether the alcohol that is left goes with water, evaporator and oil pump (common practice).

    Up to four carbons it goes with the water, under 150 °C with the solvent.
    """
    if acceptor_carbons(target) <= WATER_SOLUBLE_CARBONS:
        return True
    known = find_by_inchikey(target.acceptor.inchikey)
    boils_at_c = known.boiling_point_c if known else None
    return boils_at_c is not None and boils_at_c < LOW_BOILING_C


def water_need(key: str, role: str, volume_ml: float) -> Need:
    """Deionised water from the laboratory's supply."""
    return Need(
        key=key,
        role=role,
        group="work-up",
        substances=("water",),
        name="Water, deionised",
        bulk_volume_ml=volume_ml,
    )


def yield_triple(yields: dict[str, float]) -> tuple[float, float, float]:
    return float(yields["low"]), float(yields["planned"]), float(yields["high"])


def salt_ions(species: str, structure: Structure) -> tuple[Ion, ...]:
    """[M+NH4]+ and [M+Na]+, which lead for acetylated sugars."""
    return tuple(
        Ion(species, f"[M+{adduct}]+", adduct_mz(structure.monoisotopic_mass_da, adduct))
        for adduct in ("NH4", "Na")
    )


def liquid_ml(charges: list[Charge]) -> float:
    return sum(charge.volume_ml or 0.0 for charge in charges)


def mass_of_mg(charge: Charge) -> float:
    """Mass of a charge, from its volume and density where it is measured."""
    if charge.mass_mg is not None:
        return charge.mass_mg
    density = charge.bottle.density_g_per_ml if charge.bottle else 1.0
    return (charge.volume_ml or 0.0) * 1000 * (density or 1.0)
