"""Size the removal of the acetates: methoxide by the acetyls counted on the actual structure."""

import math
from dataclasses import dataclass

from labplan.chemistry.amounts import Content
from labplan.chemistry.coupling import Target
from labplan.planning import vessels
from labplan.planning.methods import Method
from labplan.planning.sizing import Need, Sizer
from labplan.planning.stages.common import (
    acceptor_carbons,
    bulk_need,
    liquid_ml,
    readable,
    salt_ions,
    water_need,
    yield_triple,
)
from labplan.planning.values import RouteWarning, Shortage, Stage

# From here on a glycoside hardly dissolves in cold water and foams (common practice).
LONG_CHAIN_CARBONS = 8


@dataclass(frozen=True)
class DeacetylationPlan:
    target: Target
    method: Method
    glycoside_mmol: float  # what the coupling is planned to give
    stage_number: int

    @property
    def has_haloalkyl(self) -> bool:
        """A bromide or iodide, which methoxide displaces with time: little base, and not long."""
        return "bromo or iodo alkyl" in self.target.acceptor_groups

    @property
    def base_equiv(self) -> float:
        """0.1 mol an acetyl, or that much in all beside a haloalkyl; a free acid takes one more."""
        equiv = float(self.method["base"]["per_acetyl"]) * self.target.glycoside_acetates
        if self.has_haloalkyl:
            equiv = min(equiv, float(self.method["haloalkyl"]["base_equiv"]))
        return equiv + self.target.acceptor_acids


def size_deacetylation(
    plan: DeacetylationPlan, sizer: Sizer
) -> tuple[Stage | None, list[RouteWarning]]:
    """Size the charges; the glycoside of the coupling is limiting. None with a shortage."""
    sizer.begin_stage("deacetylation")
    target, method = plan.target, plan.method
    glycoside = sizer.add_made(
        Need(
            key="glycoside",
            role="substrate",
            group="reaction",
            substances=(),
            name=target.glycoside_name or "the acetylated glycoside",
            amount_mmol=plan.glycoside_mmol,
            equivalents_planned=1.0,
            equivalents_of="glycoside",
        ),
        Content(target.glycoside.molar_mass_g_per_mol),
        from_stage=plan.stage_number - 1,
        weighed_out=False,
    )
    amount = glycoside.amount_mmol or plan.glycoside_mmol
    solvent_ml = amount / float(method["solvent"]["concentration_m"])
    sizer.add(
        bulk_need(
            "solvent",
            "solvent",
            method["solvent"]["substance"],
            group="reaction",
            volume_ml=solvent_ml,
            outward=True,
        )
    )
    base = sizer.add(_base_need(plan, amount))
    base_mmol = (base.amount_mmol if base else None) or amount * plan.base_equiv
    _add_resin(plan, sizer, base_mmol)
    if acceptor_carbons(target) < LONG_CHAIN_CARBONS:
        share = float(method["water_share"])
        sizer.add_supply(water_need("water", "keeps the product dissolved", solvent_ml * share))
    if not {"solvent", "base", "resin"} <= set(sizer.charges):
        return None, []
    return _stage(plan, sizer, amount), []


def _base_need(plan: DeacetylationPlan, amount_mmol: float) -> Need:
    base = plan.method["base"]
    return Need(
        key="base",
        role="base",
        group="reaction",
        substances=(base["substance"],),
        name=readable(base["substance"]),
        amount_mmol=amount_mmol * plan.base_equiv,
        equivalents_planned=plan.base_equiv,
        equivalents_of="glycoside",
    )


def _add_resin(plan: DeacetylationPlan, sizer: Sizer, base_mmol: float) -> None:
    """The theory by the loading on the bottle's label, some more, up to a full millilitre."""
    resin = plan.method["resin"]
    bottles = [b for b in sizer.shelf if b.substance == resin["substance"]]
    loading = next((b.loading_equiv_per_l for b in bottles if b.loading_equiv_per_l), None)
    if loading is None:
        sizer.shortages.append(
            Shortage(
                "deacetylation",
                "resin",
                resin["substance"],
                readable(resin["substance"]),
                "a resin with its loading",
                "0",
                "no bottle of acid resin with a loading on its label is on the shelf",
            )
        )
        return
    step = float(resin["step_ml"])
    with_excess_ml = base_mmol / loading * (1 + float(resin["excess_pct"]) / 100)
    resin_ml = math.ceil(with_excess_ml / step) * step
    sizer.add(bulk_need("resin", "neutralisation", resin["substance"], volume_ml=resin_ml))
    sizer.add(
        bulk_need(
            "rinse",
            "rinse of the resin",
            plan.method["solvent"]["substance"],
            volume_ml=resin_ml * float(resin["rinse_ml_per_ml"]),
            outward=True,
        )
    )


def _stage(plan: DeacetylationPlan, sizer: Sizer, amount_mmol: float) -> Stage:
    charges, method, target = sizer.charges, plan.method, plan.target
    reaction = [c for c in charges.values() if c.group == "reaction"]
    return Stage(
        number=plan.stage_number,
        kind="deacetylation",
        method=method["key"],
        method_name=method["name"],
        limiting=method["limiting"],
        scale_mmol=amount_mmol,
        is_provisional=True,
        product=target.structure,
        product_name=target.name or "the free glycoside",
        charges=tuple(charges.values()),
        vessel_ml=vessels.reaction_flask_ml(liquid_ml(reaction)),
        yield_pct=yield_triple(method["yield_pct"]),
        gross_mass_mg=amount_mmol * target.structure.molar_mass_g_per_mol,
        gross_means="all that could form",
        ions=salt_ions("product", target.structure),
    )
