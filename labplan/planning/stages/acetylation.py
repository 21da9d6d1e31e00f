"""Size the peracetylation of a free sugar: hydrate water eats anhydride, the heat is counted."""

from dataclasses import dataclass, replace

from labplan.chemistry.amounts import Content
from labplan.chemistry.coupling import Target
from labplan.planning import vessels
from labplan.planning.bottles import check_no_crystal_water
from labplan.planning.methods import Method
from labplan.planning.sizing import Need, Sizer
from labplan.planning.stages.common import (
    BICARBONATE_G_PER_MOL,
    brine_salt_need,
    bulk_need,
    extraction_need,
    extraction_volume_ml,
    mass_of_mg,
    readable,
    salt_ions,
    water_need,
    yield_triple,
)
from labplan.planning.values import Charge, RouteWarning, Stage

# Common practice: 60 kJ a mole of hydroxyl or water, 2.0 J/(g K) for the mixture.
HEAT_KJ_PER_MOL = 60.0
HEAT_CAPACITY_J_PER_G_K = 2.0
REVIEW_RISE_K = 50.0
FLASK_FILL = 0.25  # room for the exotherm and for portions
THIOSULFATE_G_PER_MOL = 248.18  # the pentahydrate
WASTE_BASE_EXCESS = 1.1


@dataclass(frozen=True)
class AcetylationPlan:
    target: Target
    method: Method
    donor_mmol: float  # wanted of the 1,2-trans pyranose
    stage_number: int

    @property
    def hydroxyls(self) -> int:
        assert self.target.residue is not None
        return self.target.residue.hydroxyls

    @property
    def active_share_pct(self) -> float:
        assert self.target.residue is not None
        return float(self.method["active_share_pct"][self.target.residue.key])

    @property
    def sugar_mmol(self) -> float:
        planned = float(self.method["yield_pct"]["planned"]) / 100
        return self.donor_mmol / planned / (self.active_share_pct / 100)


def made_donor_content(target: Target, method: Method) -> Content:
    """What the dried crude peracetate is taken for until it is measured."""
    assert target.residue is not None
    share = float(method["active_share_pct"][target.residue.key])
    return Content(
        target.donor.molar_mass_g_per_mol,
        form="neat" if share >= 100 else "anomer_mixture",
        active_share_pct=None if share >= 100 else share,
        assay_pct=float(method["product_assay"]["pct"]),
        assay_kind="qnmr",
    )


def sugar_need(target: Target, sugar_mmol: float) -> Need:
    assert target.residue is not None
    return Need(
        key="sugar",
        role="sugar",
        group="reaction",
        substances=(target.residue.key,),
        name=target.residue.name,
        amount_mmol=sugar_mmol,
        equivalents_planned=1.0,
        equivalents_of="sugar",
    )


def size_acetylation(
    plan: AcetylationPlan, sizer: Sizer
) -> tuple[Stage | None, list[RouteWarning]]:
    """Size the charges; the sugar is limiting. None with a shortage among the reagents."""
    sizer.begin_stage("acetylation")
    sugar = sizer.add(sugar_need(plan.target, plan.sugar_mmol))
    sugar_n = (sugar.amount_mmol if sugar else None) or plan.sugar_mmol
    anhydride = sizer.add(_anhydride_need(plan, sugar_n, _water_per_sugar(sugar)))
    _add_reagent(plan, sizer, sugar_n)
    anhydride_ml = (anhydride.volume_ml if anhydride else None) or 1.0
    _add_work_up(plan, sizer, anhydride_ml, sugar_n)
    if not {"sugar", "anhydride", "reagent"} <= set(sizer.charges):
        return None, []
    return _stage(plan, sizer, sugar_n)


def _water_per_sugar(sugar: Charge | None) -> float:
    """Moles of hydrate water a mole of sugar, by the bottle taken."""
    if sugar is None or sugar.bottle is None or sugar.bottle.content is None:
        return 0.0
    return sugar.bottle.content.hydrate_water


def _anhydride_need(plan: AcetylationPlan, sugar_mmol: float, water: float) -> Need:
    anhydride = plan.method["anhydride"]
    equivalents = plan.hydroxyls * float(anhydride["per_hydroxyl"]) + water
    return Need(
        key="anhydride",
        role="acetylating agent",
        group="reaction",
        substances=(anhydride["substance"],),
        name=readable(anhydride["substance"]),
        amount_mmol=sugar_mmol * equivalents,
        equivalents_planned=equivalents,
        equivalents_of="sugar",
        outward=True,
    )


def _add_reagent(plan: AcetylationPlan, sizer: Sizer, sugar_mmol: float) -> None:
    """The salt of the hot way is named anhydrous: its trihydrate is the commoner bottle."""
    reagent = sizer.add(_reagent_need(plan, sugar_mmol))
    if reagent is not None and plan.method["order"] == "hot":
        sizer.charges["reagent"] = replace(reagent, name=f"{reagent.name}, anhydrous")


def _reagent_need(plan: AcetylationPlan, sugar_mmol: float) -> Need:
    reagent = plan.method["reagent"]
    return Need(
        key="reagent",
        role="base" if plan.method["order"] == "hot" else "catalyst",
        group="reaction",
        substances=(reagent["substance"],),
        name=readable(reagent["substance"]),
        amount_mmol=sugar_mmol * float(reagent["equiv"]),
        equivalents_planned=float(reagent["equiv"]),
        equivalents_of="sugar",
        checks=(check_no_crystal_water,) if plan.method["order"] == "hot" else (),
    )


def _add_work_up(
    plan: AcetylationPlan, sizer: Sizer, anhydride_ml: float, sugar_mmol: float
) -> None:
    work_up = plan.method["work_up"]
    ice_ml = anhydride_ml * float(work_up["ice_water_volumes"])
    extraction_ml = extraction_volume_ml(work_up, ice_ml)
    base_ml = ice_ml * float(work_up["bicarbonate_volume_share"])
    brine_ml = ice_ml * float(work_up["brine_volume_share"])
    drying_mmol = plan.donor_mmol * float(work_up["drying_ml_per_mmol"])
    needs = [
        extraction_need(work_up["extraction_solvent"], extraction_ml),
        bulk_need(
            "wash_base",
            "wash",
            work_up["bicarbonate"],
            mass_mg=base_ml * float(work_up["bicarbonate_g_per_ml_water"]) * 1000,
        ),
        brine_salt_need(work_up, brine_ml),
        bulk_need(
            "drying_agent",
            "drying agent",
            work_up["drying_agent"],
            mass_mg=extraction_ml * float(work_up["drying_g_per_100_ml"]) * 10,
        ),
        bulk_need(
            "drying_solvent",
            "co-evaporation",
            work_up["drying_solvent"],
            volume_ml=drying_mmol * int(work_up["drying_times"]),
            outward=True,
        ),
    ]
    if "reducing_agent" in plan.method:
        iodine_mmol = sugar_mmol * float(plan.method["reagent"]["equiv"])
        reducing_mmol = iodine_mmol * float(plan.method["reducing_per_iodine"])
        needs.append(
            bulk_need(
                "reducing_agent",
                "iodine removal",
                plan.method["reducing_agent"],
                mass_mg=reducing_mmol * THIOSULFATE_G_PER_MOL,
            )
        )
    for need in needs:
        sizer.add(need)
    sizer.add(_waste_base_need(plan, sizer.charges))
    sizer.add_supply(water_need("ice_water", "quench, as ice and water", ice_ml))
    sizer.add_supply(water_need("wash_water", "wash", base_ml))
    sizer.add_supply(water_need("brine_water", "brine", brine_ml))


def _waste_base_need(plan: AcetylationPlan, charges: dict[str, Charge]) -> Need:
    """Bicarbonate for what acetic acid the wash does not take, and a tenth more."""
    wash = charges.get("wash_base")
    washed_mmol = (wash.mass_mg or 0.0) / BICARBONATE_G_PER_MOL if wash else 0.0
    left_mmol = max(acetic_acid_mmol(plan, charges) - washed_mmol, 0.0)
    return bulk_need(
        "waste_base",
        "neutralisation",
        plan.method["work_up"]["bicarbonate"],
        mass_mg=left_mmol * WASTE_BASE_EXCESS * BICARBONATE_G_PER_MOL,
    )


def acetic_acid_mmol(plan: AcetylationPlan, charges: dict[str, Charge]) -> float:
    """All that the anhydride becomes in water, less the acetyls that stay on the sugar."""
    anhydride, sugar = charges.get("anhydride"), charges.get("sugar")
    acetyl = 2 * ((anhydride.amount_mmol if anhydride else None) or 0.0)
    kept = plan.hydroxyls * ((sugar.amount_mmol if sugar else None) or 0.0)
    return max(acetyl - kept, 0.0)


def _stage(
    plan: AcetylationPlan, sizer: Sizer, sugar_mmol: float
) -> tuple[Stage, list[RouteWarning]]:
    charges, method, target = sizer.charges, plan.method, plan.target
    rise_k = adiabatic_rise_k(plan.hydroxyls, sugar_mmol, charges)
    yield_pct = yield_triple(method["yield_pct"])
    planned_mg = sugar_mmol * target.donor.molar_mass_g_per_mol * yield_pct[1] / 100
    assay = float(method["product_assay"]["pct"])
    stage = Stage(
        number=plan.stage_number,
        kind="acetylation",
        method=method["key"],
        method_name=method["name"],
        limiting=method["limiting"],
        scale_mmol=sugar_mmol,
        is_provisional=False,
        product=target.donor,
        product_name=target.donor_name or "the peracetate",
        charges=tuple(charges.values()),
        vessel_ml=vessels.smallest_that_holds(
            vessels.FLASKS_ML, (charges["anhydride"].volume_ml or 0.0) / FLASK_FILL
        ),
        yield_pct=yield_pct,
        gross_mass_mg=planned_mg / (assay / 100),
        gross_means=f"the dried crude at {assay:g} %",
        adiabatic_rise_k=rise_k,
        ions=salt_ions("peracetate", target.donor),
    )
    return stage, _warnings(stage, plan, charges)


def adiabatic_rise_k(hydroxyls: int, sugar_mmol: float, charges: dict[str, Charge]) -> float:
    """Temperature rise [K] if all the heat stayed in the charges of the flask."""
    reaction = [c for c in charges.values() if c.group == "reaction"]
    reacting = hydroxyls + _water_per_sugar(charges.get("sugar"))
    heat_j = sugar_mmol * reacting * HEAT_KJ_PER_MOL
    mass_g = sum(mass_of_mg(charge) for charge in reaction) / 1000
    return heat_j / (mass_g * HEAT_CAPACITY_J_PER_G_K)


def _warnings(
    stage: Stage, plan: AcetylationPlan, charges: dict[str, Charge]
) -> list[RouteWarning]:
    found = [
        RouteWarning(
            "precursor_chemical",
            "note",
            f"{charges['anhydride'].name} is a drug precursor: its use is counted; enter what was "
            "really used.",
        )
    ]
    rise = stage.adiabatic_rise_k or 0.0
    if rise > REVIEW_RISE_K:
        found.append(
            RouteWarning(
                "exotherm",
                "caution",
                f"Stage {stage.number}: if all the heat stayed in the flask it would warm by about "
                f"{rise:.0f} K. Sugar in portions into the hot anhydride and salt, never all "
                "cold and then heated; a review comes first."
                if plan.method["order"] == "hot"
                else f"Stage {stage.number}: if all the heat stayed in the flask it would warm by "
                f"about {rise:.0f} K. Sugar in portions, with cooling; a review comes first.",
            )
        )
    if plan.active_share_pct < 100:
        found.append(
            RouteWarning(
                "mixed_anomers",
                "caution",
                f"Stage {stage.number} is planned to give {plan.active_share_pct:g} % of the "
                "1,2-trans pyranose; measure it by NMR and rescale, or crystallise.",
            )
        )
    return found
