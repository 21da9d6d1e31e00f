"""Size one coupling: peracetate, alcohol, Lewis acid, solvent, and what the work-up needs."""

from dataclasses import dataclass
from datetime import date

from labplan.chemistry.coupling import Target
from labplan.planning import bottles, dryness, vessels
from labplan.planning.methods import Method
from labplan.planning.rounding import LEAST_WEIGHABLE_MG
from labplan.planning.sizing import Need, Sizer
from labplan.planning.values import (
    PassedOver,
    RouteWarning,
    Scale,
    ShelfBottle,
    Shortage,
    Stage,
)

MOLAR_VOLUME_25C_L_PER_MOL = 24.465  # ideal gas at 25 °C and 101.325 kPa
REVIEW_LIMITING_MG = 20_000


@dataclass(frozen=True)
class SizedStage:
    """A stage, or None with the shortages or the too small charges that prevent it."""

    stage: Stage | None
    shortages: tuple[Shortage, ...]
    passed_over: tuple[PassedOver, ...]
    warnings: tuple[RouteWarning, ...] = ()
    too_small: tuple[str, ...] = ()


def donor_amount_mmol(target: Target, method: Method, scale: Scale) -> float:
    """Back from what is wanted to the limiting donor [mmol], over the planned yield."""
    if scale.product_mass_mg is not None:
        product_mmol = scale.product_mass_mg / target.structure.molar_mass_g_per_mol
        return product_mmol / (float(method["yield_pct"]["planned"]) / 100)
    assert scale.acceptor_amount_mmol is not None
    return scale.acceptor_amount_mmol / float(method["acceptor_equiv"]["value"])


def size_coupling(
    target: Target, method: Method, donor_mmol: float, shelf: tuple[ShelfBottle, ...], as_of: date
) -> SizedStage:
    """Choose bottles and size every charge; the donor is limiting and is rounded first.

    With a shortage the remaining lines are still looked at, so that all are reported at once.
    """
    sizer = Sizer(shelf, as_of)
    donor = sizer.add(_donor_need(target, donor_mmol))
    donor_n = donor.amount_mmol if donor and donor.amount_mmol else donor_mmol
    for need in _reaction_needs(target, method, donor_n):
        sizer.add(need)
    solvent = sizer.charges.get("solvent")
    reaction_ml = (
        solvent.volume_ml if solvent and solvent.volume_ml else _solvent_ml(method, donor_n)
    )
    sizer.add(_sieve_need(method, reaction_ml))
    quench_mmol = _quench_anions_mmol(sizer, method, donor_n)
    _add_work_up(sizer, method, reaction_ml, quench_mmol)
    gross_mg = _gross_crude_mg(target, sizer, donor_n)
    _add_purification(sizer, method, gross_mg)
    outcome = (tuple(sizer.shortages), tuple(sizer.passed_over))
    too_small = _too_little_to_weigh(sizer)
    if sizer.shortages or too_small:
        return SizedStage(None, *outcome, too_small=too_small)
    stage, warnings = _stage(target, method, sizer, donor_n, quench_mmol, gross_mg, as_of)
    return SizedStage(stage, *outcome, tuple(warnings))


def _donor_need(target: Target, donor_mmol: float) -> Need:
    return Need(
        key="donor", role="donor", group="reaction", substances=(),
        name=target.donor_name or target.donor.smiles, inchikey=target.donor.inchikey,
        amount_mmol=donor_mmol, equivalents_planned=1.0, equivalents_of="donor",
    )  # fmt: skip


def _solvent_ml(method: Method, donor_mmol: float) -> float:
    return donor_mmol / float(method["solvent"]["concentration_m"])


def _reaction_needs(target: Target, method: Method, donor_mmol: float) -> tuple[Need, ...]:
    acceptor_equiv = float(method["acceptor_equiv"]["value"])
    promoter = method["promoter"]
    solvent = method["solvent"]
    return (
        Need(
            key="acceptor", role="acceptor", group="reaction", substances=(),
            name=target.acceptor_name or target.acceptor.smiles,
            inchikey=target.acceptor.inchikey,
            amount_mmol=donor_mmol * acceptor_equiv,
            equivalents_planned=acceptor_equiv, equivalents_of="donor",
        ),
        Need(
            key="promoter", role="promoter", group="reaction",
            substances=(promoter["substance"],), name=readable(promoter["substance"]),
            amount_mmol=donor_mmol * float(promoter["equiv"]),
            equivalents_planned=float(promoter["equiv"]), equivalents_of=promoter["basis"],
        ),
        Need(
            key="solvent", role="solvent", group="reaction",
            substances=(solvent["substance"],), name=readable(solvent["substance"]),
            bulk_volume_ml=_solvent_ml(method, donor_mmol), outward=True,
            checks=(
                bottles.check_no_alcohol_stabiliser,
                bottles.check_water_at_most(float(solvent["water_ppm_max"])),
            ),
            prefer_dry=True,
        ),
    )  # fmt: skip


def readable(key: str) -> str:
    return key.replace("-", " ")


def _sieve_need(method: Method, reaction_ml: float) -> Need:
    sieves = method["sieves"]
    return Need(
        key="sieves", role="drying agent", group="reaction",
        substances=tuple(sieves["substances"]), name="activated molecular sieves",
        bulk_mass_mg=reaction_ml * float(sieves["g_per_ml"]) * 1000,
        checks=(bottles.check_activated_within(int(sieves["activation_days"])),),
        optional=True,
    )  # fmt: skip


def _quench_anions_mmol(sizer: Sizer, method: Method, donor_mmol: float) -> float:
    """mmol of acid to neutralise: the promoter's anions and the acetic acid set free."""
    promoter = sizer.charges.get("promoter")
    planned = donor_mmol * float(method["promoter"]["equiv"])
    promoter_mmol = promoter.amount_mmol if promoter and promoter.amount_mmol else planned
    return float(method["promoter"]["acid_anions"]) * promoter_mmol + donor_mmol


def _add_work_up(sizer: Sizer, method: Method, reaction_ml: float, quench_mmol: float) -> None:
    work_up = method["work_up"]
    bicarbonate_mmol = quench_mmol * (1 + float(work_up["bicarbonate_excess_pct"]) / 100)
    brine_ml = reaction_ml * float(work_up["brine_volume_share"])
    extraction_ml = (
        reaction_ml * float(work_up["extraction_volume_share"]) * int(work_up["extractions"])
    )
    organic_ml = reaction_ml + extraction_ml
    for need in (
        Need(
            key="quench_base", role="quench", group="work-up",
            substances=(work_up["bicarbonate"],), name=readable(work_up["bicarbonate"]),
            bulk_mass_mg=bicarbonate_mmol * 84.006,
        ),
        Need(
            key="extraction_solvent", role="extraction", group="work-up",
            substances=(work_up["extraction_solvent"],),
            name=readable(work_up["extraction_solvent"]),
            bulk_volume_ml=extraction_ml, outward=True,
        ),
        Need(
            key="brine_salt", role="brine", group="work-up",
            substances=(work_up["brine_salt"],), name=readable(work_up["brine_salt"]),
            bulk_mass_mg=brine_ml * float(work_up["brine_g_per_ml_water"]) * 1000,
        ),
        Need(
            key="drying_agent", role="drying agent", group="work-up",
            substances=(work_up["drying_agent"],), name=readable(work_up["drying_agent"]),
            bulk_mass_mg=organic_ml / 100 * float(work_up["drying_g_per_100_ml"]) * 1000,
        ),
    ):  # fmt: skip
        sizer.add(need)
    for key, role, volume in (
        ("quench_water", "quench", reaction_ml),
        ("brine_water", "brine", brine_ml),
    ):
        sizer.add_supply(
            Need(
                key=key, role=role, group="work-up", substances=("water",),
                name="Water, deionised", bulk_volume_ml=volume,
            )
        )  # fmt: skip


def _gross_crude_mg(target: Target, sizer: Sizer, donor_mmol: float) -> float:
    """All product that could form and the alcohol left over: what the column has to carry."""
    acceptor = sizer.charges.get("acceptor")
    left_over_mg = 0.0
    if acceptor and acceptor.amount_mmol:
        left_over = acceptor.amount_mmol - donor_mmol
        left_over_mg = max(left_over, 0.0) * target.acceptor.molar_mass_g_per_mol
    return donor_mmol * target.structure.molar_mass_g_per_mol + left_over_mg


def _add_purification(sizer: Sizer, method: Method, gross_mg: float) -> None:
    column = method["purification"]
    silica_mg = gross_mg * float(column["silica_g_per_g_gross"])
    eluent_ml = silica_mg / 1000 * float(column["eluent_ml_per_g_silica"])
    sizer.add(
        Need(
            key="silica", role="stationary phase", group="purification",
            substances=(column["silica"],), name=readable(column["silica"]),
            bulk_mass_mg=silica_mg,
        )
    )  # fmt: skip
    for index, part in enumerate(column["eluent"], start=1):
        sizer.add(
            Need(
                key=f"eluent_{index}", role="eluent", group="purification",
                substances=(part["substance"],), name=readable(part["substance"]),
                bulk_volume_ml=eluent_ml * float(part["share"]), outward=True,
            )
        )  # fmt: skip


def _stage(
    target: Target, method: Method, sizer: Sizer, donor_mmol: float, quench_mmol: float,
    gross_mg: float, as_of: date,
) -> tuple[Stage, list[RouteWarning]]:  # fmt: skip
    charges = sizer.charges
    promoter_mmol = charges["promoter"].amount_mmol or 0.0
    reaction = [c for c in charges.values() if c.group == "reaction"]
    water = dryness.water_of(
        reaction, promoter_mmol=promoter_mmol, donor_mmol=donor_mmol, as_of=as_of,
        used_up_per_water=float(method["promoter"]["used_up_per_water"]),
    )  # fmt: skip
    liquid_ml = sum(c.volume_ml or 0.0 for c in reaction)
    quench_ml = liquid_ml + (charges["quench_water"].volume_ml or 0.0)
    yields = method["yield_pct"]
    theory_mg = donor_mmol * target.structure.molar_mass_g_per_mol
    stage = Stage(
        kind="coupling",
        method=method["key"],
        limiting=method["limiting"],
        scale_mmol=donor_mmol,
        charges=tuple(charges.values()),
        water=water,
        vessel_ml=vessels.reaction_flask_ml(liquid_ml),
        quench_vessel_ml=vessels.quench_beaker_ml(quench_ml),
        quench_anions_mmol=quench_mmol,
        carbon_dioxide_l=quench_mmol * MOLAR_VOLUME_25C_L_PER_MOL / 1000,
        expected_mass_mg=theory_mg * yields["planned"] / 100,
        expected_low_mg=theory_mg * yields["low"] / 100,
        expected_high_mg=theory_mg * yields["high"] / 100,
        gross_crude_mg=gross_mg,
        yield_pct=(yields["low"], yields["planned"], yields["high"]),
    )
    warnings = dryness.dryness_warnings(water, charges, float(method["promoter"]["equiv"]))
    return stage, warnings + _scale_warnings(stage)


def _scale_warnings(stage: Stage) -> list[RouteWarning]:
    found = []
    limiting = next(c for c in stage.charges if c.key == stage.limiting)
    if (limiting.mass_mg or 0) > REVIEW_LIMITING_MG:
        found.append(
            RouteWarning(
                "scale_review",
                "caution",
                f"The limiting charge is {(limiting.mass_mg or 0) / 1000:.1f} g, over "
                f"{REVIEW_LIMITING_MG / 1000:.0f} g: a hazard review by the group comes first.",
            )
        )
    if "sieves" not in {c.key for c in stage.charges}:
        found.append(
            RouteWarning(
                "no_activated_sieves",
                "caution",
                "No activated molecular sieves are on the shelf; the coupling is planned "
                "without. Activate some (300 °C overnight, or 250 °C in vacuum) for a better run.",
            )
        )
    return found


def _too_little_to_weigh(sizer: Sizer) -> tuple[str, ...]:
    """Names of reacting charges under the least weighable mass."""
    return tuple(
        charge.name
        for charge in sizer.charges.values()
        if charge.amount_mmol is not None
        and charge.dispense == "mass"
        and (charge.mass_mg or 0.0) < LEAST_WEIGHABLE_MG
    )
