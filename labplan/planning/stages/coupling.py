"""Size one coupling: peracetate, alcohol, Lewis acid, solvent, and what the work-up needs."""

import math
from dataclasses import dataclass

from labplan.chemistry.amounts import Content
from labplan.chemistry.coupling import Target
from labplan.chemistry.masses import ACETYL_CHANGE_DA, adduct_mz, oxocarbenium_mz
from labplan.planning import bottles, dryness, vessels
from labplan.planning.methods import Method
from labplan.planning.sizing import Need, Sizer
from labplan.planning.stages.common import (
    BICARBONATE_G_PER_MOL,
    MOLAR_VOLUME_25C_L_PER_MOL,
    brine_salt_need,
    bulk_need,
    extraction_need,
    extraction_volume_ml,
    leaves_in_work_up,
    liquid_ml,
    readable,
    salt_ions,
    structure_need,
    water_need,
    yield_triple,
)
from labplan.planning.values import Charge, Ion, Quench, RouteWarning, Stage

REVIEW_LIMITING_MG = 20_000
AZIDE_WASHES_SHARE = 1.5  # three washes of half the reaction volume (common practice)
BICARBONATE_M_AT_0C = 0.8  # saturated, common practice (1.1 at 20 °C)
ACID_WASHES_SHARE = 1.5  # three washes of half the reaction volume take out acid fluoride
# Acetonitrile mixes with water; four volumes of ethyl acetate and water part from it again.
DILUTION_SHARE = 3.0
# What a syringe and its needle may still hold of the promoter (common practice).
LEAST_SYRINGE_MMOL = 4.0
SYRINGE_SHARE = 0.2
LEAST_SYRINGE_RINSE_ML = 2.0
WATER_MISCIBLE = "acetonitrile"
_NEUTRALISED_WATER = ("quench_water", "acid_wash_water", "brine_water", "neutralising_water")


@dataclass(frozen=True)
class CouplingPlan:
    """What is decided before the charges are sized."""

    target: Target
    method: Method
    solvent: dict[str, object]
    donor_mmol: float
    stage_number: int
    made_donor: Content | None  # the donor comes from the stage before, with this content

    @property
    def promoter_equiv(self) -> float:
        """Per mole of donor; each mole of carboxylic acid takes one more."""
        acids = self.target.acceptor_acids * self.acceptor_equiv
        return float(self.method["promoter"]["equiv"]) + acids

    @property
    def acceptor_equiv(self) -> float:
        return acceptor_equivalents(self.target, self.method)

    @property
    def has_acid(self) -> bool:
        return self.target.acceptor_acids > 0

    @property
    def has_azide(self) -> bool:
        return "azide" in self.target.acceptor_groups

    @property
    def is_amino_acid(self) -> bool:
        return bool({"Fmoc", "Cbz"} & set(self.target.acceptor_groups))

    @property
    def has_fluoride(self) -> bool:
        return bool(self.method["promoter"]["gel"])

    @property
    def mixes_with_water(self) -> bool:
        return self.solvent["substance"] == WATER_MISCIBLE

    @property
    def is_diluted(self) -> bool:
        """An acid quench must be free of acid fluoride before anything of it is evaporated."""
        return self.has_acid and self.mixes_with_water

    @property
    def extraction_solvent(self) -> str:
        work_up = self.method["work_up"]
        key = "acid_extraction_solvent" if self.is_diluted else "extraction_solvent"
        return str(work_up[key])


def acceptor_equivalents(target: Target, method: Method) -> float:
    """A protected amino acid is dear: less of it than of a simple alcohol."""
    is_amino_acid = bool({"Fmoc", "Cbz"} & set(target.acceptor_groups))
    return float(method["acceptor_equiv"]["amino_acid" if is_amino_acid else "value"])


def donor_need(target: Target, donor_mmol: float) -> Need:
    return structure_need("donor", target.donor_name, target.donor, donor_mmol, equivalents=1.0)


def size_coupling(plan: CouplingPlan, sizer: Sizer) -> tuple[Stage | None, list[RouteWarning]]:
    """Choose bottles and size every charge; the donor is limiting and is rounded first.

    With a shortage the remaining lines are still looked at, so that all are reported at once;
    the stage is None then.
    """
    sizer.begin_stage("coupling")
    need = donor_need(plan.target, plan.donor_mmol)
    if plan.made_donor is None:
        donor = sizer.add(need)
    else:
        donor = sizer.add_made(
            need, plan.made_donor, from_stage=plan.stage_number - 1, weighed_out=True
        )
    donor_n = donor.amount_mmol if donor and donor.amount_mmol else plan.donor_mmol
    for reaction_need in _reaction_needs(plan, donor_n):
        sizer.add(reaction_need)
    solvent = sizer.charges.get("solvent")
    if plan.method["promoter"]["by"] == "syringe":
        _add_syringe_rinse(sizer, plan, donor_n)
    reaction_ml = (solvent.volume_ml if solvent else None) or _solvent_ml(plan, donor_n)
    if plan.method["sieves"] is not None:
        sizer.add(_sieve_need(plan.method, reaction_ml))
    quench_mmol = _acid_mmol(sizer, plan, donor_n)
    _add_work_up(sizer, plan, reaction_ml, quench_mmol)
    gross_mg = _gross_crude_mg(plan, sizer, donor_n)
    _add_purification(sizer, plan, gross_mg)
    if not {"donor", "acceptor", "promoter", "solvent", "quench_base"} <= set(sizer.charges):
        return None, []
    if not sizer.charges["promoter"].amount_mmol:
        return None, []
    return _stage(plan, sizer, donor_n, quench_mmol, gross_mg)


def _solvent_ml(plan: CouplingPlan, donor_mmol: float) -> float:
    return donor_mmol / float(str(plan.solvent["concentration_m"]))


def _reaction_needs(plan: CouplingPlan, donor_mmol: float) -> tuple[Need, ...]:
    target, promoter = plan.target, plan.method["promoter"]
    return (
        structure_need(
            "acceptor",
            target.acceptor_name,
            target.acceptor,
            donor_mmol * plan.acceptor_equiv,
            equivalents=plan.acceptor_equiv,
        ),
        Need(
            key="promoter",
            role="promoter",
            group="reaction",
            substances=(promoter["substance"],),
            name=readable(promoter["substance"]),
            amount_mmol=donor_mmol * plan.promoter_equiv,
            equivalents_planned=plan.promoter_equiv,
            equivalents_of=promoter["basis"],
        ),
        _dry_solvent_need("solvent", "reaction", plan, _solvent_ml(plan, donor_mmol)),
    )


def _dry_solvent_need(key: str, group: str, plan: CouplingPlan, volume_ml: float) -> Need:
    """The solvent of the coupling: no alcohol in it, and dry."""
    substance = str(plan.solvent["substance"])
    return Need(
        key=key,
        role="solvent" if key == "solvent" else "rinse of the syringe",
        group=group,
        substances=(substance,),
        name=readable(substance),
        bulk_volume_ml=volume_ml,
        outward=True,
        checks=(
            bottles.check_no_alcohol_stabiliser,
            bottles.check_water_at_most(float(str(plan.solvent["water_ppm_max"]))),
        ),
        prefer_dry=True,
        as_another=key != "solvent",
    )


def _add_syringe_rinse(sizer: Sizer, plan: CouplingPlan, donor_mmol: float) -> None:
    """Dry solvent for the syringe of the promoter, and bicarbonate where the quench has none."""
    promoter = sizer.charges.get("promoter")
    promoter_ml = (promoter.volume_ml if promoter else None) or 0.0
    rinse_ml = max(math.ceil(promoter_ml), LEAST_SYRINGE_RINSE_ML)
    sizer.add(_dry_solvent_need("syringe_solvent", "work-up", plan, rinse_ml))
    if not plan.has_acid:
        return
    held_back = max(LEAST_SYRINGE_MMOL, SYRINGE_SHARE * donor_mmol * plan.promoter_equiv)
    base_mmol = _bicarbonate_mmol(plan, held_back * float(plan.method["promoter"]["acid_anions"]))
    bicarbonate = plan.method["work_up"]["bicarbonate"]
    sizer.add(
        bulk_need(
            "syringe_base",
            "quench of the syringe",
            bicarbonate,
            mass_mg=base_mmol * BICARBONATE_G_PER_MOL,
        )
    )
    water_ml = base_mmol / BICARBONATE_M_AT_0C
    sizer.add_supply(water_need("syringe_water", "quench of the syringe", water_ml))


def _sieve_need(method: Method, reaction_ml: float) -> Need:
    sieves = method["sieves"]
    return Need(
        key="sieves",
        role="drying agent",
        group="reaction",
        substances=tuple(sieves["substances"]),
        name="activated molecular sieves",
        bulk_mass_mg=reaction_ml * float(sieves["g_per_ml"]) * 1000,
        checks=(bottles.check_activated_within(int(sieves["activation_days"])),),
        optional=True,
    )


def _acid_mmol(sizer: Sizer, plan: CouplingPlan, donor_mmol: float) -> float:
    """mmol of acid to neutralise: the promoter's anions and the acetic acid set free."""
    promoter = sizer.charges.get("promoter")
    planned = donor_mmol * plan.promoter_equiv
    promoter_mmol = (promoter.amount_mmol if promoter else None) or planned
    return float(plan.method["promoter"]["acid_anions"]) * promoter_mmol + donor_mmol


def _bicarbonate_mmol(plan: CouplingPlan, acid_mmol: float) -> float:
    return acid_mmol * (1 + float(plan.method["work_up"]["bicarbonate_excess_pct"]) / 100)


def _add_work_up(sizer: Sizer, plan: CouplingPlan, reaction_ml: float, acid_mmol: float) -> None:
    work_up = plan.method["work_up"]
    brine_ml = reaction_ml * float(work_up["brine_volume_share"])
    extraction_ml = extraction_volume_ml(work_up, reaction_ml)
    base_mg = _bicarbonate_mmol(plan, acid_mmol) * BICARBONATE_G_PER_MOL
    organic_ml = reaction_ml * (1 + (DILUTION_SHARE if plan.is_diluted else 0)) + extraction_ml
    drying_mg = organic_ml * float(work_up["drying_g_per_100_ml"]) * 10
    for need in (
        bulk_need("quench_base", "quench", work_up["bicarbonate"], mass_mg=base_mg),
        extraction_need(plan.extraction_solvent, extraction_ml),
        brine_salt_need(work_up, brine_ml),
        bulk_need("drying_agent", "drying agent", work_up["drying_agent"], mass_mg=drying_mg),
    ):
        sizer.add(need)
    _add_filtration(sizer, plan, reaction_ml)
    sizer.add_supply(water_need("quench_water", "quench", reaction_ml))
    if plan.has_azide:
        sizer.add_supply(water_need("azide_water", "wash", reaction_ml * AZIDE_WASHES_SHARE))
    if plan.has_acid:
        washes_ml = reaction_ml * ACID_WASHES_SHARE
        sizer.add_supply(water_need("acid_wash_water", "wash", washes_ml))
        sizer.add_supply(water_need("neutralising_water", "neutralisation", reaction_ml))
    if plan.is_diluted:
        sizer.add(
            bulk_need(
                "dilution_solvent",
                "dilution",
                plan.extraction_solvent,
                volume_ml=reaction_ml * DILUTION_SHARE,
                outward=True,
            )
        )
    sizer.add_supply(water_need("brine_water", "brine", brine_ml))


def _add_filtration(sizer: Sizer, plan: CouplingPlan, reaction_ml: float) -> None:
    """Powdered sieves and basic bismuth salts block a frit: a pad, and solvent for the cake."""
    work_up = plan.method["work_up"]
    sieves = sizer.charges.get("sieves")
    pad_mg = reaction_ml * 1000 * float(str(work_up.get("pad_g_per_ml", 0)))
    if sieves is not None:
        pad_mg += (sieves.mass_mg or 0.0) * float(str(work_up["filter_aid_g_per_g_sieves"]))
    if not pad_mg:
        return
    sizer.add(bulk_need("filter_aid", "filter aid", str(work_up["filter_aid"]), mass_mg=pad_mg))
    sizer.add(
        bulk_need(
            "rinse_solvent",
            "rinse",
            plan.extraction_solvent,
            volume_ml=reaction_ml * float(str(work_up["rinse_volume_share"])),
            outward=True,
        )
    )


def _gross_crude_mg(plan: CouplingPlan, sizer: Sizer, donor_mmol: float) -> float:
    """All that could be left: product in full, the alcohol that stays, the 1,2-cis donor."""
    target, acceptor = plan.target, sizer.charges.get("acceptor")
    left_over_mg = 0.0
    if acceptor and acceptor.amount_mmol and not leaves_in_work_up(target):
        left_over = max(acceptor.amount_mmol - donor_mmol, 0.0)
        left_over_mg = left_over * target.acceptor.molar_mass_g_per_mol
    cis_mmol = donor_mmol * (100 / _active_share_pct(plan, sizer) - 1)
    return (
        donor_mmol * target.glycoside.molar_mass_g_per_mol
        + left_over_mg
        + cis_mmol * target.donor.molar_mass_g_per_mol
    )


def _active_share_pct(plan: CouplingPlan, sizer: Sizer) -> float:
    """The share of the donor that reacts; the rest, mostly 1,2-cis, comes out as it went in."""
    donor = sizer.charges.get("donor")
    content = donor.bottle.content if donor and donor.bottle else plan.made_donor
    return (content.active_share_pct if content else None) or 100.0


def _gross_means(plan: CouplingPlan, sizer: Sizer) -> str:
    parts = ["product in full"]
    if not leaves_in_work_up(plan.target):
        parts.append("the alcohol that is left over")
    if _active_share_pct(plan, sizer) < 100:
        parts.append("the donor in its forms that do not react")
    return " and ".join((", ".join(parts[:-1]), parts[-1])) if parts[1:] else parts[0]


def _add_purification(sizer: Sizer, plan: CouplingPlan, gross_mg: float) -> None:
    column = plan.method["purification"]
    silica_mg = gross_mg * float(column["silica_g_per_g_gross"])
    eluent_ml = silica_mg / 1000 * float(column["eluent_ml_per_g_silica"])
    sizer.add(
        bulk_need(
            "silica",
            "stationary phase",
            column["silica"],
            group="purification",
            mass_mg=silica_mg,
        )
    )
    for index, part in enumerate(column[eluent_kind(plan.target)], start=1):
        sizer.add(
            bulk_need(
                f"eluent_{index}",
                "eluent",
                part["substance"],
                group="purification",
                volume_ml=eluent_ml * float(part["share"]),
                outward=True,
            )
        )


def eluent_kind(target: Target) -> str:
    """Seven or more acetates, or an amino acid, want a more polar eluent."""
    is_polar = target.glycoside_acetates >= 7 or bool({"Fmoc", "Cbz"} & set(target.acceptor_groups))
    return "polar_eluent" if is_polar else "eluent"


def _stage(
    plan: CouplingPlan, sizer: Sizer, donor_mmol: float, acid_mmol: float, gross_mg: float
) -> tuple[Stage, list[RouteWarning]]:
    charges, method, target = sizer.charges, plan.method, plan.target
    reaction = [c for c in charges.values() if c.group == "reaction"]
    water = dryness.water_of(
        reaction,
        promoter_mmol=charges["promoter"].amount_mmol or 0.0,
        donor_mmol=donor_mmol,
        as_of=sizer.as_of,
    )
    stage = Stage(
        number=plan.stage_number,
        kind="coupling",
        method=method["key"],
        method_name=f"{method['name']} in {readable(str(plan.solvent['substance']))}",
        limiting=method["limiting"],
        scale_mmol=donor_mmol,
        is_provisional=plan.made_donor is not None,
        product=target.glycoside,
        product_name=target.glycoside_name or "the glycoside",
        charges=tuple(charges.values()),
        vessel_ml=vessels.reaction_flask_ml(liquid_ml(reaction)),
        yield_pct=yield_triple(method["yield_pct"]),
        gross_mass_mg=gross_mg,
        gross_means=_gross_means(plan, sizer),
        water=water,
        quench=_quench(plan, charges, reaction, acid_mmol),
        ions=_ions(target),
    )
    warnings = dryness.dryness_warnings(
        water,
        charges,
        catalytic=bool(method["promoter"]["catalytic"]),
        used_up_per_water=float(method["promoter"]["used_up_per_water"]),
        yield_pct=stage.yield_pct[1],
    )
    return stage, [*warnings, *_method_warnings(method), *_stage_warnings(stage, method)]


def _quench(
    plan: CouplingPlan, charges: dict[str, Charge], reaction: list[Charge], acid_mmol: float
) -> Quench:
    """The beaker holds reaction, water and what thins them; of an acid, also the water layers."""
    bicarbonate = _bicarbonate_mmol(plan, acid_mmol)
    met = [charges[key] for key in ("quench_water", "dilution_solvent") if key in charges]
    water = [c for key, c in charges.items() if key in _NEUTRALISED_WATER]
    largest_ml = max(liquid_ml([*reaction, *met]), liquid_ml(water) if plan.has_acid else 0.0)
    return Quench(
        vessel_ml=vessels.quench_beaker_ml(largest_ml),
        acid_mmol=acid_mmol,
        bicarbonate_mmol=bicarbonate,
        clear_solution_ml=bicarbonate / BICARBONATE_M_AT_0C,
        carbon_dioxide_l=acid_mmol * MOLAR_VOLUME_25C_L_PER_MOL / 1000,
    )


def _ions(target: Target) -> tuple[Ion, ...]:
    donor_da = target.donor.monoisotopic_mass_da
    return (
        *salt_ions("glycoside", target.glycoside),
        *salt_ions("donor", target.donor),
        Ion("glycosyl cation", "[M-OAc]+", oxocarbenium_mz(donor_da)),
        Ion("hemiacetal (donor + water)", "[M+Na]+", adduct_mz(donor_da - ACETYL_CHANGE_DA, "Na")),
    )


def _method_warnings(method: Method) -> list[RouteWarning]:
    return [RouteWarning(**warning) for warning in method["warnings"]]


def _stage_warnings(stage: Stage, method: Method) -> list[RouteWarning]:
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
    if method["sieves"] is not None and "sieves" not in {c.key for c in stage.charges}:
        found.append(
            RouteWarning(
                "no_activated_sieves",
                "caution",
                "No activated molecular sieves are on the shelf; the coupling is planned "
                "without. Activate some (300 °C overnight, or 250 °C in vacuum) for a better run.",
            )
        )
    return found
