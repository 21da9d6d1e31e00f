"""The removal of the acetates as numbered steps."""

from labplan.planning.evaporation import from_pressures
from labplan.planning.figures import mass_text
from labplan.planning.stages.deacetylation import DeacetylationPlan
from labplan.planning.steps import DO_NOT_STOP, MAY_STAND, UNATTENDED, Writer
from labplan.planning.values import Stage, Step


def deacetylation_steps(plan: DeacetylationPlan, stage: Stage) -> tuple[Step, ...]:
    """From the acetylated glycoside to the weighed free one."""
    writer = Writer(stage.charges)
    hours = plan.method["duration_h"]
    how_long = f"for {hours['low']} to {hours['high']} h"
    if plan.has_haloalkyl:
        how_long = f"for at most {plan.method['haloalkyl']['most_h']} h"
    writer.add(
        "Before you start",
        "Read the supplier's safety data sheet of every bottle named here and compare codes and "
        "labels with the table. Goggles and gloves: methoxide burns eyes and skin, methanol is "
        "toxic and burns with a pale flame.",
        f"Rinse {writer.text('resin')} on a frit with half of {writer.text('rinse')} until the "
        "filtrate is neutral and colourless.",
        uses=("resin", "rinse"),
        pause=MAY_STAND,
    )
    writer.add(
        "Take off the acetates",
        f"Weigh {writer.text('glycoside')} into a dry {stage.vessel_ml} mL flask: the mass is a "
        "planning figure, so divide what the stage before really gave by it and multiply every "
        "charge of this stage by that factor. Add "
        f"{writer.text('solvent')} and stir under argon. Add {writer.text('base')} by syringe.",
        f"Stir at {plan.method['temperature_c']} °C {how_long}. Moist paper shows 12 or "
        "more all the time.",
        uses=("glycoside", "solvent", "base"),
        watch="TLC (ethyl acetate/methanol/water 7:2:1, charred): spots of partly acetylated "
        "product give way to one slow spot; "
        + (
            "no more base and no longer: it takes the halogen"
            if plan.has_haloalkyl
            else "paper falls below 11: add a tenth of the base again"
        ),
        pause=DO_NOT_STOP if plan.has_haloalkyl else UNATTENDED,
    )
    writer.add(
        "Neutralise",
        f"Add {writer.text('water')}: it keeps the product dissolved."
        if writer.has("water")
        else "If a solid has come out, warm to 40 °C until it is clear: a long chain hardly "
        "dissolves in water.",
        "Add the rinsed resin in portions with gentle stirring until moist paper shows pH 6 to 7, "
        "and filter at once; rinse the resin with the other half of the methanol for it.",
        uses=("water",),
        watch="stop at pH 6 to 7: resin left in the solution cleaves the glycoside; a stirring bar "
        "that grinds the beads colours the product",
    )
    writer.add(
        "Concentrate, weigh and record",
        f"Evaporate at {_bath(plan)} ({from_pressures(('methanol',), _bath_c(plan))}), "
        + (
            "take up in water, filter and freeze-dry, or dry to constant mass in vacuum."
            if writer.has("water")
            else "slowly, since it foams, and dry to constant mass in vacuum."
        ),
        f"Expected: {mass_text(round(stage.expected_mass_mg))} of {stage.product_name} "
        f"({mass_text(round(stage.expected_low_mg))} to "
        f"{mass_text(round(stage.expected_high_mg))} from this stage). Enter what was weighed.",
        "Waste: methanol, with the methyl acetate formed, to non-halogenated flammable; resin to "
        "solid waste once rinsed.",
        watch="free glycosides hold water and methanol: look for them by NMR before you count a "
        "yield",
        pause=MAY_STAND,
    )
    return tuple(writer.steps)


def _bath_c(plan: DeacetylationPlan) -> int:
    return 30 if "azide" in plan.target.acceptor_groups else 40


def _bath(plan: DeacetylationPlan) -> str:
    how = " behind a shield, with no metal spatula" if _bath_c(plan) < 40 else ""
    return f"{_bath_c(plan)} °C or below{how}"
