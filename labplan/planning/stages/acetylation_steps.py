"""The peracetylation as numbered steps: hot salt and anhydride first, sugar in portions."""

import math

from labplan.planning.evaporation import from_pressures
from labplan.planning.figures import mass_text, two_figures
from labplan.planning.stages.acetylation import AcetylationPlan, acetic_acid_mmol
from labplan.planning.stages.common import MOLAR_VOLUME_25C_L_PER_MOL, liquid_ml
from labplan.planning.steps import (
    BREATHED_IN,
    MAY_STAND,
    UNATTENDED,
    Writer,
    toxic_sentence,
)
from labplan.planning.values import Stage, Step
from labplan.planning.vessels import BEAKERS_ML, funnel_ml, smallest_that_holds

PORTIONS = 5
BATH_C = 40
LATE_HEAT = (
    "If a portion gives no rise within 10 min or stays undissolved, add no more until it has gone: "
    "the heat can come late"
)


def acetylation_steps(plan: AcetylationPlan, stage: Stage) -> tuple[Step, ...]:
    """From the sugar to the dried crude peracetate."""
    writer = Writer(stage.charges)
    _prepare(writer, stage)
    if plan.method["order"] == "hot":
        _hot(writer, plan, stage)
    else:
        _in_portions(writer, plan, stage)
    _work_up(writer, plan)
    _dry(writer, plan)
    _neutralise_water_layers(writer, plan)
    _weigh(writer, plan, stage)
    return tuple(writer.steps)


def _prepare(writer: Writer, stage: Stage) -> None:
    writer.add(
        "Before you start",
        "Read the supplier's safety data sheet of every bottle named here and compare codes and "
        "labels with the table. Work in a hood with goggles and gloves; acetic anhydride burns "
        f"eyes and skin. {toxic_sentence(writer.by_key['anhydride'])} {BREATHED_IN}",
        f"Fit a {stage.vessel_ml} mL three-necked flask with stirring bar, reflux condenser, "
        "internal thermometer and a stopper, a drying tube on the condenser, on a bath that can be "
        "dropped at once.",
        watch="a bottle that differs from the table: stop and plan again",
        pause=MAY_STAND,
    )


def _exotherm(stage: Stage) -> str:
    rise = stage.adiabatic_rise_k or 0.0
    return f"If all the heat stayed in the flask it would warm by about {rise:.0f} K."


def _hot(writer: Writer, plan: AcetylationPlan, stage: Stage) -> None:
    hours = plan.method["duration_h"]
    writer.add(
        "Heat anhydride and salt",
        f"Stir {writer.text('anhydride')} with {writer.text('reagent')} and warm to "
        f"{plan.method['temperature_c']} °C inside.",
        uses=("anhydride", "reagent"),
    )
    writer.add(
        "Add the sugar in portions",
        f"Add {writer.text('sugar')} in at least {PORTIONS} portions, each only after the exotherm "
        f"of the one before has fallen. {_exotherm(stage)} Never charge everything cold and heat "
        "it.",
        uses=("sugar",),
        watch=f"inside not above 120 °C: drop the bath. {LATE_HEAT}",
    )
    writer.add(
        "Finish the acetylation",
        f"Keep at {plan.method['temperature_c']} °C for {hours['low']} to {hours['high']} h, until "
        "the solution is clear and TLC (heptane/ethyl acetate 1:2, charred) shows one main spot. "
        "Let it cool to below 50 °C.",
        watch="brown is usual, black is not",
    )


def _in_portions(writer: Writer, plan: AcetylationPlan, stage: Stage) -> None:
    room_c = plan.method["temperature_c"]
    hours = plan.method["duration_h"]
    writer.add(
        "Dissolve the iodine",
        f"Stir {writer.text('reagent')} in {writer.text('anhydride')} in an ice bath until the "
        "inside is at 5 °C.",
        uses=("reagent", "anhydride"),
    )
    writer.add(
        "Add the sugar in portions",
        f"From 5 °C inside add {writer.text('sugar')} in at least {PORTIONS} portions, each after "
        f"the exotherm of the one before has fallen to below 10 °C. {_exotherm(stage)}",
        uses=("sugar",),
        watch=f"inside not above 30 °C: no more sugar, more ice. {LATE_HEAT}",
    )
    writer.add(
        "Let it come to room temperature",
        "After the last portion keep it in the ice bath until the inside has stayed below "
        f"10 °C for 30 min. Then take the bath away and let it come to {room_c} °C; "
        "stay with it and watch the thermometer until the inside has not climbed for 1 h, with the "
        "ice bath ready beneath.",
        watch="inside above 30 °C, or climbing faster than 1 K in a minute: back into the ice. "
        "Undissolved sugar is heat that is still to come",
    )
    writer.add(
        "Finish the acetylation",
        f"Stir at {plan.method['temperature_c']} °C for {hours['low']} to {hours['high']} h, until "
        "TLC (heptane/ethyl acetate 1:1, charred) shows one main spot.",
        watch="leave it alone only when all the sugar has dissolved and the inside stands at room "
        "temperature",
        pause=UNATTENDED,
    )


def _work_up(writer: Writer, plan: AcetylationPlan) -> None:
    ice_ml = writer.by_key["ice_water"].volume_ml or 0.0
    beaker = smallest_that_holds(BEAKERS_ML, ice_ml * 2.5)
    thiosulfate = ""
    if writer.has("reducing_agent"):
        thiosulfate = f"Stir in {writer.text('reducing_agent')} until the brown colour has gone."
    writer.add(
        "Hydrolyse the anhydride",
        f"Pour the mixture slowly, below 50 °C, into {writer.text('ice_water')}, half of it ice, "
        f"in an open, stirred {beaker} mL beaker. {thiosulfate}".strip(),
        "Stir for 1 to 2 h until no oily drops of anhydride are left.",
        uses=("ice_water", "reducing_agent"),
        watch="keep it below 30 °C with more ice",
    )
    third = (writer.by_key["extraction_solvent"].volume_ml or 0.0) / 3
    writer.add(
        "Extract and wash",
        f"Extract three times with a third each of {writer.text('extraction_solvent')} in a "
        f"{funnel_ml(ice_ml * 1.1 + third)} mL funnel. Wash the combined organic layers with "
        f"bicarbonate made from {writer.text('wash_base')} and {writer.text('wash_water')}, in "
        "portions and venting often, until no more gas comes, then with brine made from "
        f"{writer.text('brine_salt')} and {writer.text('brine_water')}.",
        uses=("extraction_solvent", "wash_base", "wash_water", "brine_salt", "brine_water"),
        watch="dichloromethane is the lower layer; carbon dioxide builds pressure in the funnel",
    )


def _neutralise_water_layers(writer: Writer, plan: AcetylationPlan) -> None:
    """Acid layers and the bicarbonate wash in one closed canister would burst it."""
    charges = writer.by_key
    water_ml = liquid_ml([charges[key] for key in ("ice_water", "wash_water", "brine_water")])
    gas_l = acetic_acid_mmol(plan, charges) * MOLAR_VOLUME_25C_L_PER_MOL / 1000
    writer.add(
        "Neutralise the water layers",
        "Combine all water layers in an open, stirred "
        f"{smallest_that_holds(BEAKERS_ML, water_ml * 2)} mL beaker in the hood: the bicarbonate "
        f"wash gives gas with the acid ones. Add {writer.text('waste_base')} in portions. In all "
        f"up to {two_figures(gas_l)} L of carbon dioxide leaves. Bottle it as waste only when the "
        "gas has stopped and paper shows pH 7 or above, and keep the cap loose for a day.",
        uses=("waste_base",),
        watch="never acid and bicarbonate layers into one closed canister: it bursts; foam",
        pause=MAY_STAND,
    )


def _dry(writer: Writer, plan: AcetylationPlan) -> None:
    times = int(plan.method["work_up"]["drying_times"])
    share_ml = math.floor((writer.by_key["drying_solvent"].volume_ml or 0.0) / times)
    solvents = tuple(
        writer.by_key[key].substance for key in ("extraction_solvent", "drying_solvent")
    )
    writer.add(
        "Dry the peracetate",
        f"Dry over {writer.text('drying_agent')} for 15 min, filter and evaporate at {BATH_C} °C "
        f"or below ({from_pressures(solvents, BATH_C)}). Take it down with "
        f"{writer.text('drying_solvent')}, {times} × {share_ml:.0f} mL: water or an alcohol left "
        "in it would take part in the coupling. Dry to constant mass in vacuum.",
        uses=("drying_agent", "drying_solvent"),
        watch="foams in vacuum: open the pump slowly",
        pause=MAY_STAND,
    )


def _weigh(writer: Writer, plan: AcetylationPlan, stage: Stage) -> None:
    writer.add(
        "Weigh, check and rescale",
        f"Expected: {mass_text(round(stage.expected_mass_mg))} of "
        f"{stage.product_name}{_anomers(plan)} ({mass_text(round(stage.expected_low_mg))} to "
        f"{mass_text(round(stage.expected_high_mg))}), {mass_text(round(stage.gross_mass_mg))} as "
        f"{stage.gross_means}. {_signals(plan)}What is weighed here sets every "
        "charge of the next stage. Enter it, and the anhydride really used.",
        "Waste: the neutralised water layers hold sodium acetate"
        f"{', iodide and thiosulfate' if writer.has('reducing_agent') else ''}; "
        "dichloromethane to halogenated, toluene to non-halogenated.",
        watch="the waste rules of your house come first",
        pause=MAY_STAND,
    )


def _anomers(plan: AcetylationPlan) -> str:
    if plan.active_share_pct >= 100:
        return ""
    return f" (all forms; {plan.active_share_pct:g} % of it is the wanted one)"


def _signals(plan: AcetylationPlan) -> str:
    """H-1 of the two pentaacetates in CDCl3, recalled; a guide, to be checked with a reference."""
    residue = plan.target.residue
    if residue is None or residue.key not in ("d-glucose", "d-galactose", "lactose"):
        return "Look at the forms by NMR and take the share of the wanted one into the factor. "
    return (
        "Look at H-1 by NMR: near 5.7 ppm, d, 8 Hz for the wanted beta form, near 6.3 ppm, d, "
        "3.5 Hz for alpha (recalled; check). Over 5 % of alpha: crystallise from ethanol and dry "
        "again, or take the share into the factor. "
    )
