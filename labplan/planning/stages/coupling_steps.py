"""The coupling as numbered steps.

Order and cautions are common practice: promoter last and in the cold, the reaction poured into
open, stirred bicarbonate, never the reverse; peracetates show by charring only.
"""

import math

from labplan.planning.figures import mass_text, three_figures
from labplan.planning.stages.coupling import CouplingPlan, eluent_kind
from labplan.planning.steps import DO_NOT_STOP, MAY_STAND, UNATTENDED, Writer
from labplan.planning.values import Quench, ShelfBottle, Stage, Step
from labplan.planning.vessels import funnel_ml

UV_GROUPS = frozenset({"Fmoc", "Cbz", "benzyl ester", "benzyl ether", "4-methoxybenzyl ether"})


def coupling_steps(plan: CouplingPlan, stage: Stage, gel: ShelfBottle | None) -> tuple[Step, ...]:
    """From the empty flask to the weighed glycoside."""
    assert stage.quench is not None
    writer = Writer(stage.charges)
    _prepare(writer, plan, stage, gel)
    _charge_flask(writer, plan)
    _react(writer, plan)
    if plan.has_acid:
        _quench_into_water(writer, stage.quench)
        _extract(writer, plan)
        _neutralise_water_layers(writer, stage.quench)
    else:
        _quench(writer, plan, stage.quench)
        _extract(writer, plan)
    _concentrate(writer, plan, stage)
    _purify(writer, plan, stage)
    _finish(writer, plan, stage)
    return tuple(writer.steps)


def _prepare(writer: Writer, plan: CouplingPlan, stage: Stage, gel: ShelfBottle | None) -> None:
    writer.add(
        "Before you start",
        "Read the supplier's safety data sheet of every bottle named here and compare codes and "
        "labels with the table.",
        "Work in a hood, with goggles and laminate gloves under nitrile ones: dichloromethane goes "
        "through thin nitrile in a minute or two; change them at once when wetted.",
        _gel_sentence(plan, gel),
        "Start early: the promoter should be in before 10 o'clock.",
        watch="a bottle that differs from the table: stop and plan again",
        pause=MAY_STAND,
    )
    writer.add(
        "Dry the flask",
        f"Dry a {stage.vessel_ml} mL two-necked round-bottomed flask with a stirring bar at 120 °C "
        "for 2 h, or with a heat gun in vacuum. Let it cool under dry argon or nitrogen, then fit "
        "a septum and an internal thermometer.",
        pause=MAY_STAND,
    )


def _gel_sentence(plan: CouplingPlan, gel: ShelfBottle | None) -> str:
    """BF3 gives HF with water: gel first, then the doctor."""
    if not plan.method["promoter"]["gel"]:
        return ""
    where = "Have calcium gluconate gel, in date, within reach"
    if gel is not None:
        until = f", valid to {gel.expires_on.isoformat()}" if gel.expires_on else ""
        where = f"Calcium gluconate gel stands in {gel.place} (bottle {gel.code}{until})"
    return (
        f"{where}: BF3 etherate gives hydrogen fluoride with water. On skin: flush at once, rub in "
        "the gel, then see a doctor. Wear a face shield while it is transferred."
    )


def _charge_flask(writer: Writer, plan: CouplingPlan) -> None:
    acceptor = writer.by_key["acceptor"]
    by_mass = acceptor.dispense == "mass"
    small_liquid = by_mass and acceptor.volume_ml is not None
    how = (
        "weighed by difference in a closed, tared syringe"
        if small_liquid
        else "as a solid"
        if by_mass
        else "by syringe"
    )
    donor = f"{writer.text('donor')}, dried to constant mass in vacuum at 40 °C or below"
    provisional = (
        "The mass is a planning figure: weigh what the stage before really gave and rescale every "
        "charge of this stage."
        if plan.made_donor is not None
        else ""
    )
    sieves = ""
    if writer.has("sieves"):
        bottle = writer.by_key["sieves"].bottle
        day = bottle.activated_on.isoformat() if bottle and bottle.activated_on else "?"
        sieves = f"Add {writer.text('sieves')}, activated {day}."
    writer.add(
        "Charge donor and alcohol",
        f"Weigh {donor}, into the flask and purge with argon. {provisional}".strip(),
        f"Add {writer.text('solvent')}, then {writer.text('acceptor')}, {how}.",
        sieves,
        _shield(plan),
        "Stir for 30 min at room temperature.",
        uses=("donor", "solvent", "acceptor", "sieves"),
        watch="donor and alcohol dissolve; weigh back what stays on the paper",
    )


def _shield(plan: CouplingPlan) -> str:
    if "azide" not in plan.target.acceptor_groups:
        return ""
    return (
        "From here on work behind a shield, with no metal spatula; the azide must be free of "
        "inorganic azide, which gives diazidomethane with dichloromethane and hydrazoic acid with "
        "acid."
    )


def _react(writer: Writer, plan: CouplingPlan) -> None:
    method = plan.method
    promoter, temperature = writer.by_key["promoter"], method["temperature_c"]
    by_syringe = method["promoter"]["by"] == "syringe"
    minutes = max(5, min(60, round((promoter.volume_ml or 1.0) * 3)))
    cold = temperature["addition"] < 10
    writer.add(
        "Add the promoter",
        "Cool to 0 °C (inside) in an ice bath." if cold else "",
        f"Add {writer.text('promoter')} "
        + (
            f"by syringe, dropwise over about {minutes} min."
            if by_syringe
            else "in one portion, quickly: it takes up water from the air."
        ),
        "Rinse syringe and needle with a little dichloromethane into the "
        f"{'water' if plan.has_acid else 'bicarbonate'} of the quench."
        if by_syringe
        else "",
        uses=("promoter",),
        watch="inside not above 5 °C; slow the addition if it climbs"
        if cold
        else "a rise of more than 5 K inside: cool",
    )
    hours = method["duration_h"]
    writer.add(
        "Let it react",
        ("Let it come to room temperature" if cold else "Keep it at room temperature")
        + f" (about {temperature['reaction']} °C) and stir under "
        f"argon for {hours['low']} to {hours['high']} h, usually {hours['usual']} h."
        + (" Keep an azide at or below 20 °C." if _shield(plan) else ""),
        "After 1 h and then every hour shake two drops with saturated sodium hydrogencarbonate and "
        "ethyl acetate and spot the upper layer beside donor and alcohol.",
        _seeing(plan),
        "Or look for the ions of this stage by LC-MS.",
        watch="stop as soon as the donor has gone or stays the same between two samples: longer "
        "contact turns product into its 1,2-cis form and takes off acetyl",
        pause=UNATTENDED,
    )


def _seeing(plan: CouplingPlan) -> str:
    plate = (
        "heptane/ethyl acetate 1:1"
        if eluent_kind(plan.target) == "eluent"
        else ("heptane/ethyl acetate 1:2")
    )
    char = "dip in 5 to 10 % sulfuric acid in ethanol and char with a heat gun"
    if UV_GROUPS & set(plan.target.acceptor_groups) or _is_aromatic(plan):
        return (
            f"Develop in {plate}; look at 254 nm for alcohol and product, then {char}: the donor "
            "does not absorb UV."
        )
    return f"Develop in {plate}, {char}: peracetates do not absorb UV."


def _is_aromatic(plan: CouplingPlan) -> bool:
    return "c1" in plan.target.acceptor.smiles


POUR = (
    "Cool the reaction back to 0 °C and pour it INTO the stirred quench in portions of about a "
    "tenth, over 10 to 15 min; never the reverse, never in a closed vessel."
)


def _slurry(writer: Writer, quench: Quench) -> str:
    """A stoichiometric promoter takes more bicarbonate than dissolves in the cold."""
    if (writer.by_key["quench_water"].volume_ml or 0.0) >= quench.clear_solution_ml:
        return ""
    return f"; it stays a slurry (clear at 0 °C it would take {quench.clear_solution_ml:.0f} mL)"


def _quench(writer: Writer, plan: CouplingPlan, quench: Quench) -> None:
    writer.add(
        "Quench",
        f"Stir {writer.text('quench_base')} with {writer.text('quench_water')} in an open "
        f"{quench.vessel_ml} mL beaker in an ice bath{_slurry(writer, quench)}.",
        POUR,
        f"Up to {three_figures(quench.carbon_dioxide_l)} L of carbon dioxide leaves.",
        "Stir until the gas has stopped and the water layer is at pH 7 or above; if it is not, add "
        "solid sodium hydrogencarbonate by the spatula.",
        uses=("quench_base", "quench_water"),
        watch="foam: wait between portions"
        + ("; the water contains fluoride, never acidify it" if _has_fluoride(plan) else ""),
    )


def _quench_into_water(writer: Writer, quench: Quench) -> None:
    """A free acid would go into bicarbonate with the product: water first, base on the waste."""
    writer.add(
        "Quench",
        f"Stir {writer.text('quench_water')} with ice in an open {quench.vessel_ml} mL plastic "
        "beaker: the product is an acid and would be lost in bicarbonate.",
        POUR,
        uses=("quench_water",),
        watch="the water layer is strongly acid and contains fluoride: plastic, not glass",
    )


def _neutralise_water_layers(writer: Writer, quench: Quench) -> None:
    writer.add(
        "Neutralise the water layers",
        f"Stir {writer.text('quench_base')} with {writer.text('neutralising_water')} in an open "
        f"{quench.vessel_ml} mL beaker and pour the water layers INTO it in portions. Up to "
        f"{three_figures(quench.carbon_dioxide_l)} L of carbon dioxide leaves.",
        uses=("quench_base", "neutralising_water"),
        watch="foam; pH 7 or above at the end",
    )


def _has_fluoride(plan: CouplingPlan) -> bool:
    return bool(plan.method["promoter"]["gel"])


def _extract(writer: Writer, plan: CouplingPlan) -> None:
    charges = writer.by_key
    organic_ml = (charges["solvent"].volume_ml or 0) + (
        charges["extraction_solvent"].volume_ml or 0
    )
    largest_ml = organic_ml + max(
        charges["quench_water"].volume_ml or 0, charges["brine_water"].volume_ml or 0
    )
    filtering = ""
    if writer.has("filter_aid"):
        filtering = (
            f"Filter through a pad of {writer.text('filter_aid')} in a sintered funnel and rinse "
            f"the cake in two portions with {writer.text('rinse_solvent')}."
        )
    funnel = f"in a {funnel_ml(largest_ml)} mL funnel, venting it often"
    mixes_with_water = charges["solvent"].substance == "acetonitrile"
    writer.add(
        "Extract",
        filtering,
        "Evaporate the acetonitrile at 40 °C or below (from 230 mbar on): it mixes with water and "
        f"would hold the product there. Then work {funnel}."
        if mixes_with_water
        else f"Separate the layers {funnel}.",
        "Extract the water layer three times with a third each of "
        f"{writer.text('extraction_solvent')}, and wash the combined organic layers once with "
        f"brine made from {writer.text('brine_salt')} and {writer.text('brine_water')}.",
        "An emulsion: let it stand, add a little brine, or filter it again."
        if not plan.has_acid
        else "Use water and brine only, no base.",
        uses=("filter_aid", "rinse_solvent", "extraction_solvent", "brine_salt", "brine_water"),
        watch="the layers may change places with toluene: test with a drop of water"
        if charges["solvent"].substance == "toluene"
        else "dichloromethane is the lower layer",
    )


def _concentrate(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    azide = bool(_shield(plan))
    writer.add(
        "Dry and concentrate",
        "Wash three times with water first, to take out what is left of the azido alcohol."
        if azide
        else "",
        f"Dry the organic layer over {writer.text('drying_agent')} for 15 min, filter, and "
        "evaporate: bath "
        + ("30 °C or below, behind the shield." if azide else "40 °C or below.")
        + " Dichloromethane from 800 mbar on"
        + (", toluene from 80 mbar on" if writer.by_key["solvent"].substance == "toluene" else "")
        + "; then 1 h at the oil pump.",
        f"Weigh the crude; {mass_text(round(stage.gross_mass_mg))} is the most that can be there.",
        uses=("drying_agent",),
        watch="the crude never stays overnight in contact with moist acid or on silica; dry and "
        "cold it keeps",
        pause=DO_NOT_STOP if azide else MAY_STAND,
    )


def _purify(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    column = plan.method["purification"]
    eluents = tuple(key for key in writer.by_key if key.startswith("eluent_"))
    silica_g = (writer.by_key["silica"].mass_mg or 0.0) / 1000
    bed_ml = silica_g * float(column["bed_ml_per_g_silica"])
    height = float(column["bed_height_cm"])
    diameter_cm = math.sqrt(4 * bed_ml / (math.pi * height))
    gradient = column["gradient" if eluent_kind(plan.target) == "eluent" else "polar_gradient"]
    writer.add(
        "Purify",
        f"Take {writer.text('silica')}: dry-load the crude on about a twentieth of it, the rest "
        f"packed to {height:.0f} cm ({bed_ml:.0f} mL) in a column of {diameter_cm:.1f} cm.",
        f"Elute with {' and '.join(writer.text(key) for key in eluents)}, in three equal steps "
        f"from {gradient} by volume; fractions of a tenth of the bed.",
        "A free acid streaks: put 0.5 % of acetic acid into the eluent." if plan.has_acid else "",
        alcohol_left_over(plan),
        " ".join(plan.method["left_over"]),
        uses=("silica", *eluents),
        watch="spots from the front: acetate of the alcohol, product, donor, hemiacetal (usual "
        "order; check with references); pool only what shows one spot",
        pause=MAY_STAND,
    )


def alcohol_left_over(plan: CouplingPlan) -> str:
    """What becomes of the excess acceptor, by its size and polarity (common practice)."""
    target = plan.target
    if {"Fmoc", "Cbz"} & set(target.acceptor_groups):
        return "The protected amino acid that is left can run with its glycoside: check by LC-MS."
    carbons = sum(letter in "Cc" for letter in target.acceptor.smiles)
    if carbons <= 4:
        return "What is left of the alcohol has gone with the water layers."
    if carbons <= 7:
        return "What is left of the alcohol goes partly with the water, the rest at the oil pump."
    return (
        "What is left of the alcohol can run close to the product: take it off at the oil pump, or "
        "acetylate the crude first, which sends it to the front and brings back lost acetyl."
    )


def _finish(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    writer.add(
        "Dry, weigh and record",
        "Evaporate the pure fractions at 40 °C or below, dry to constant mass in vacuum and weigh.",
        f"Expected: {mass_text(round(stage.expected_mass_mg))} of {stage.product_name} "
        f"({mass_text(round(stage.expected_low_mg))} to "
        f"{mass_text(round(stage.expected_high_mg))}). Enter what was really weighed and measured.",
        "Waste: dichloromethane distillate and rinses to halogenated; heptane and ethyl acetate to "
        "non-halogenated flammable"
        + (
            "; water layers to aqueous fluoride, not acidified; sieves, filter cake and drying "
            "agent carry fluoride too"
            if _has_fluoride(plan)
            else "; water layers to aqueous metal waste"
        )
        + "; silica to solid waste once the solvent is off."
        + (" Azide waste apart, never to acid, copper or lead." if _shield(plan) else ""),
        watch="the waste rules of your house come first",
        pause=MAY_STAND,
    )
