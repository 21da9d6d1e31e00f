"""The work-up of a coupling as numbered steps, from the quench to the weighed glycoside.

Order and cautions are common practice: the reaction poured into open, stirred bicarbonate, never
the reverse; every stream that is left has its waste.
"""

import math

from labplan.planning.evaporation import from_pressures, pressure_mbar
from labplan.planning.figures import in_sentence, mass_text, two_figures
from labplan.planning.stages.common import (
    WATER_SOLUBLE_CARBONS,
    acceptor_carbons,
    leaves_in_work_up,
    liquid_ml,
)
from labplan.planning.stages.coupling import WATER_MISCIBLE, CouplingPlan, eluent_kind
from labplan.planning.steps import (
    DO_NOT_STOP,
    MAY_STAND,
    Writer,
)
from labplan.planning.values import Charge, Quench, Stage
from labplan.planning.vessels import funnel_ml, quench_beaker_ml

_METALS = {"indium-tribromide": "indium", "bismuth-triflate": "bismuth"}


def work_up_steps(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    """Add the steps after the reaction."""
    assert stage.quench is not None
    _quench(writer, plan, stage.quench)
    _extract(writer, plan)
    if plan.has_acid:
        _neutralise_water_layers(writer, stage.quench)
    _concentrate(writer, plan, stage)
    _purify(writer, plan, stage)
    _sort_waste(writer, plan)
    _finish(writer, plan, stage)


def _pour(plan: CouplingPlan) -> str:
    was_cold = plan.method["temperature_c"]["addition"] < 10
    start = "Cool the reaction back to 0 °C and pour it" if was_cold else "Pour the reaction"
    return (
        f"{start} INTO the stirred, open quench in portions of about a tenth, over 10 to 15 min; "
        "never the reverse, never in a closed vessel."
    )


def _slurry(writer: Writer, quench: Quench) -> str:
    """A stoichiometric promoter takes more bicarbonate than dissolves in the cold."""
    if (writer.by_key["quench_water"].volume_ml or 0.0) >= quench.clear_solution_ml:
        return ""
    return f"; it stays a slurry (clear at 0 °C it would take {quench.clear_solution_ml:.0f} mL)"


def make_quench_ready(writer: Writer, plan: CouplingPlan, quench: Quench) -> None:
    """Before the promoter is opened: a spill of it goes there too."""
    if plan.has_acid:
        writer.add(
            "Make the quench ready",
            f"Put {writer.text('quench_water')} into an open {quench.vessel_ml} mL plastic beaker "
            "in an ice bath: the product is an acid and would be lost in bicarbonate.",
            _syringe_beaker(writer),
            uses=("quench_water", "syringe_base", "syringe_water"),
        )
        return
    writer.add(
        "Make the quench ready",
        f"Stir {writer.text('quench_base')} with {writer.text('quench_water')} in an open "
        f"{quench.vessel_ml} mL beaker in an ice bath{_slurry(writer, quench)}.",
        uses=("quench_base", "quench_water"),
    )


def _syringe_beaker(writer: Writer) -> str:
    """The quench of an acid is plain water: what the syringe holds needs a base of its own."""
    if not writer.has("syringe_base"):
        return ""
    liquid = [writer.by_key[key] for key in ("syringe_water", "syringe_solvent")]
    return (
        f"Stir {writer.text('syringe_base')} with {writer.text('syringe_water')} in a second, open "
        f"{quench_beaker_ml(liquid_ml(liquid))} mL plastic beaker, for the syringe and for spills: "
        "the promoter reacts violently with plain water."
    )


def _quench(writer: Writer, plan: CouplingPlan, quench: Quench) -> None:
    if plan.has_acid:
        writer.add(
            "Quench",
            f"{_filtering(writer)} Do this before any water: hydrogen fluoride etches glass.",
            f"Thin the filtrate with {writer.text('dilution_solvent')}: so it parts from water."
            if writer.has("dilution_solvent")
            else "",
            _pour(plan),
            uses=("filter_aid", "rinse_solvent", "dilution_solvent"),
            watch="from here to the neutralised water layers: the water is strongly acid and holds "
            "hydrogen fluoride; plastic vessels and funnels only, laminate gloves, face shield",
        )
        return
    writer.add(
        "Quench",
        _pour(plan),
        f"Up to {two_figures(quench.carbon_dioxide_l)} L of carbon dioxide leaves.",
        "Stir until the gas has stopped and the water layer is at pH 7 or above; if it is not, add "
        "solid sodium hydrogencarbonate by the spatula.",
        watch="foam: wait between portions"
        + ("; the water contains fluoride, never acidify it" if plan.has_fluoride else ""),
    )


def _neutralise_water_layers(writer: Writer, quench: Quench) -> None:
    writer.add(
        "Neutralise the water layers",
        f"Stir {writer.text('quench_base')} with {writer.text('neutralising_water')} in an open "
        f"{quench.vessel_ml} mL plastic beaker and pour the water layers, and what rinsed the "
        f"syringe, INTO it in portions. Up to {two_figures(quench.carbon_dioxide_l)} L of carbon "
        "dioxide leaves.",
        uses=("quench_base", "neutralising_water"),
        watch="foam; pH 7 or above at the end",
    )


def _extract(writer: Writer, plan: CouplingPlan) -> None:
    charges = writer.by_key
    organic_ml = liquid_ml(
        [c for key, c in charges.items() if key in ("solvent", "dilution_solvent")]
    ) + (charges["extraction_solvent"].volume_ml or 0)
    largest_ml = organic_ml + max(
        charges["quench_water"].volume_ml or 0, charges["brine_water"].volume_ml or 0
    )
    if plan.has_acid:
        _extract_acid(writer, plan, largest_ml)
        return
    funnel = f"in a {funnel_ml(largest_ml)} mL funnel, venting it often"
    writer.add(
        "Extract",
        _filtering(writer),
        f"Evaporate the acetonitrile at {_bath_c(plan)} °C or below (from "
        f"{pressure_mbar(WATER_MISCIBLE, _bath_c(plan)):.0f} mbar on): it mixes with water and "
        f"would hold the product there. Then work {funnel}."
        if plan.mixes_with_water
        else f"Separate the layers {funnel}.",
        "Extract the water layer three times with a third each of "
        f"{writer.text('extraction_solvent')}, and wash the combined organic layers once with "
        f"{_brine(writer)}.",
        "An emulsion: let it stand, add a little brine, or filter it again.",
        "Then wash in three equal portions with "
        f"{writer.text('azide_water')}, to take out what is left of the azido alcohol."
        if writer.has("azide_water")
        else "",
        uses=(
            *("filter_aid", "rinse_solvent", "extraction_solvent"),
            *("brine_salt", "brine_water", "azide_water"),
        ),
        watch=_layers(plan),
    )


def _extract_acid(writer: Writer, plan: CouplingPlan, largest_ml: float) -> None:
    """No base, since the product is an acid; acid fluoride is washed out before any vacuum."""
    writer.add(
        "Extract",
        f"Separate the layers in a {funnel_ml(largest_ml)} mL plastic funnel, venting it often. "
        "Extract the water layer three times with a third each of "
        f"{writer.text('extraction_solvent')}. Wash the combined organic layers in three equal "
        f"portions with {writer.text('acid_wash_water')}, then once with {_brine(writer)}. Use "
        "water and brine only, no base.",
        "The last wash must show pH 4 or above on paper: if it does not, wash again with water. "
        "Evaporate nothing before: acid fluoride in it would go into flask and pump as hydrogen "
        "fluoride.",
        uses=("extraction_solvent", "acid_wash_water", "brine_salt", "brine_water"),
        watch=f"keep all water layers for the next step; {_layers(plan)}",
    )


def _brine(writer: Writer) -> str:
    return f"brine made from {writer.text('brine_salt')} and {writer.text('brine_water')}"


def _layers(plan: CouplingPlan) -> str:
    if plan.is_diluted:
        return "ethyl acetate is the upper layer; with no second layer add brine"
    if plan.solvent["substance"] == "toluene":
        return "the layers may change places with toluene: test with a drop of water"
    return "dichloromethane is the lower layer"


def _filtering(writer: Writer) -> str:
    if not writer.has("filter_aid"):
        return ""
    return (
        f"Filter through a pad of {writer.text('filter_aid')} in a sintered funnel and rinse the "
        f"cake in two portions with {writer.text('rinse_solvent')}."
    )


def _bath_c(plan: CouplingPlan) -> int:
    return 30 if plan.has_azide else 40


def _concentrate(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    azide = plan.has_azide
    writer.add(
        "Dry and concentrate",
        f"Dry the organic layer over {writer.text('drying_agent')} for 15 min, filter, and "
        f"evaporate: bath {_bath_c(plan)} °C or below"
        + (", behind the shield" if azide else "")
        + f"; {from_pressures(_organic_solvents(writer, plan), _bath_c(plan))}; then 1 h at the "
        "oil pump.",
        "What the condenser and the pump trap hold contains azido alcohol: azide waste."
        if azide
        else "",
        f"Weigh the crude: at most {mass_text(round(stage.gross_mass_mg))} "
        f"({stage.gross_means}); more means that solvent is left.",
        uses=("drying_agent",),
        watch="the crude does not keep in contact with acid; dry and cold it does",
        pause=DO_NOT_STOP if azide else MAY_STAND,
    )


def _organic_solvents(writer: Writer, plan: CouplingPlan) -> tuple[str, ...]:
    """What the organic layer is made of; a solution of the acceptor brings its solvent."""
    charges = writer.by_key
    found = [charges["extraction_solvent"].substance]
    if not plan.mixes_with_water or plan.is_diluted:
        found.append(charges["solvent"].substance)
    acceptor = charges["acceptor"].bottle
    if acceptor is not None and acceptor.solvent:
        found.append(acceptor.solvent)
    return tuple(dict.fromkeys(found))


def _purify(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    column = plan.method["purification"]
    eluents = _eluents(writer)
    silica_g = (writer.by_key["silica"].mass_mg or 0.0) / 1000
    bed_ml = silica_g * float(column["bed_ml_per_g_silica"])
    height = float(column["bed_height_cm"])
    diameter_cm = round(2 * math.sqrt(4 * bed_ml / (math.pi * height))) / 2
    gradient = column["gradient" if eluent_kind(plan.target) == "eluent" else "polar_gradient"]
    writer.add(
        "Purify",
        f"Take {writer.text('silica')}: dry-load the crude on about a twentieth of it, the rest "
        f"packed to {height:.0f} cm ({bed_ml:.0f} mL) in a column of about "
        f"{diameter_cm:g} cm inner diameter.",
        f"Elute with {' and '.join(writer.text(charge.key) for charge in eluents)}, mixed as "
        f"{'/'.join(_plain(charge.substance) for charge in eluents)} {gradient} by volume, a third "
        "of the whole each; fractions of a tenth of the bed.",
        "A free acid streaks: put 0.5 % of acetic acid into the eluent." if plan.has_acid else "",
        alcohol_left_over(plan),
        " ".join(plan.method["left_over"]),
        uses=("silica", *(charge.key for charge in eluents)),
        watch="acetate of the alcohol runs in front of the product, donor and hemiacetal behind "
        "it, the alcohol where a reference shows it; do not leave the product on the silica; pool "
        "only what shows one spot",
    )


def _plain(substance: str) -> str:
    return substance.removeprefix("n-").replace("-", " ")


def alcohol_left_over(plan: CouplingPlan) -> str:
    """What becomes of the excess acceptor, by its size and boiling point (common practice)."""
    target = plan.target
    if plan.is_amino_acid:
        return "The protected amino acid that is left can run with its glycoside: check by LC-MS."
    if acceptor_carbons(target) <= WATER_SOLUBLE_CARBONS:
        return "What is left of the alcohol has gone with the water layers."
    if leaves_in_work_up(target):
        return "What is left of the alcohol goes partly with the water, the rest at the oil pump."
    return (
        "What is left of the alcohol can run close to the product and does not leave at the oil "
        "pump: take a reference spot of it; acetylating the crude first would send it to the front."
    )


def _sort_waste(writer: Writer, plan: CouplingPlan) -> None:
    """Every liquid and solid that the stage leaves, each into one kind of waste."""
    writer.add(
        "Sort the waste",
        _azide_waste(plan) if plan.has_azide else _distillates(writer, plan),
        "" if plan.has_azide else _water_waste(writer, plan),
        _solid_waste(writer, plan),
        watch="the waste rules of your house come first",
        pause=MAY_STAND,
    )


def _left_in_waste(plan: CouplingPlan) -> str:
    return "fluoride" if plan.has_fluoride else _METALS[plan.method["promoter"]["substance"]]


def _azide_waste(plan: CouplingPlan) -> str:
    return (
        "Azide waste, in a container of its own (label: azide, dichloromethane, "
        f"{_left_in_waste(plan)}): the water layers and all that condenser and pump trap hold; "
        "never to acid, copper or lead, never into the halogenated drum. Heptane and ethyl acetate "
        "without azide to non-halogenated flammable."
    )


def _distillates(writer: Writer, plan: CouplingPlan) -> str:
    if plan.is_diluted:
        return (
            "Ethyl acetate, with what is left of the acetonitrile, and heptane to non-halogenated "
            "flammable."
        )
    solvents = _organic_solvents(writer, plan)
    beside = " and ".join(name for name in solvents if name != "dichloromethane")
    return (
        f"Dichloromethane distillate{f', with the {beside} in it,' if beside else ''} and rinses "
        "to halogenated; "
        + ("acetonitrile distillate, " if plan.mixes_with_water else "")
        + "heptane and ethyl acetate to non-halogenated flammable."
    )


def _water_waste(writer: Writer, plan: CouplingPlan) -> str:
    text = (
        "Water layers, neutralised, to aqueous fluoride, never acidified"
        if plan.has_fluoride
        else f"Water layers to aqueous metal waste ({_left_in_waste(plan)})"
    )
    if leaves_in_work_up(plan.target):
        alcohol = in_sentence(writer.by_key["acceptor"].name)
        text += (
            f"; they and the distillate hold the {alcohol} that is left: write it on both labels"
        )
    return f"{text}."


def _solid_waste(writer: Writer, plan: CouplingPlan) -> str:
    solids = [
        name
        for key, name in (("sieves", "sieves"), ("filter_aid", "filter cake"))
        if writer.has(key)
    ]
    cake = " and ".join([*([", ".join(solids)] if solids else []), "drying agent"])
    carry = "they carry" if solids else "it carries"
    kind = "fluoride" if plan.has_fluoride else "metal"
    return (
        f"{cake[0].upper()}{cake[1:]} to solid {kind} waste: {carry} {_left_in_waste(plan)}. "
        "Silica to solid waste once the solvent is off."
    )


def _finish(writer: Writer, plan: CouplingPlan, stage: Stage) -> None:
    solvents = tuple(charge.substance for charge in _eluents(writer))
    where = ", behind the shield" if plan.has_azide else ""
    writer.add(
        "Dry, weigh and record",
        f"Evaporate the pure fractions at {_bath_c(plan)} °C or below{where} "
        f"({from_pressures(solvents, _bath_c(plan))}), dry "
        + ("in vacuum" if plan.has_azide else "to constant mass in vacuum")
        + " and weigh.",
        f"Expected: {mass_text(round(stage.expected_mass_mg))} of {stage.product_name} "
        f"({mass_text(round(stage.expected_low_mg))} to "
        f"{mass_text(round(stage.expected_high_mg))}). Enter what was really weighed and measured.",
        pause=MAY_STAND,
    )


def _eluents(writer: Writer) -> list[Charge]:
    return [charge for key, charge in writer.by_key.items() if key.startswith("eluent_")]
