"""The coupling as numbered steps.

Order and cautions are common practice: promoter last and in the cold, the reaction poured into
open, stirred bicarbonate, never the reverse; peracetates show by charring only.
"""

from labplan.planning.stages.coupling import CouplingPlan, eluent_kind
from labplan.planning.stages.coupling_work_up_steps import make_quench_ready, work_up_steps
from labplan.planning.steps import (
    BREATHED_IN,
    MAY_STAND,
    UNATTENDED,
    Writer,
    toxic_sentence,
)
from labplan.planning.values import ShelfBottle, Stage, Step

UV_GROUPS = frozenset({"Fmoc", "Cbz", "benzyl ester", "benzyl ether", "4-methoxybenzyl ether"})


def coupling_steps(plan: CouplingPlan, stage: Stage, gel: ShelfBottle | None) -> tuple[Step, ...]:
    """From the empty flask to the weighed glycoside."""
    assert stage.quench is not None
    writer = Writer(stage.charges)
    _prepare(writer, plan, stage, gel)
    _charge_flask(writer, plan)
    make_quench_ready(writer, plan, stage.quench)
    _react(writer, plan)
    work_up_steps(writer, plan, stage)
    return tuple(writer.steps)


def _prepare(writer: Writer, plan: CouplingPlan, stage: Stage, gel: ShelfBottle | None) -> None:
    writer.add(
        "Before you start",
        "Read the supplier's safety data sheet of every bottle named here and compare codes and "
        "labels with the table.",
        "Work in a hood, with goggles and laminate gloves under nitrile ones: dichloromethane goes "
        "through thin nitrile in a minute or two; change them at once when wetted.",
        _gel_sentence(plan, gel),
        "Start early: the coupling wants to be watched for most of a day.",
        "Work behind a shield from the moment the azide is opened." if plan.has_azide else "",
        watch="a bottle that differs from the table: stop and plan again",
        pause=MAY_STAND,
    )
    writer.add(
        "Dry the flask",
        f"Dry a {stage.vessel_ml} mL three-necked round-bottomed flask with a stirring bar at "
        "120 °C for 2 h, or with a heat gun in vacuum. Let it cool under dry argon, then fit a "
        "septum, an internal thermometer and an argon inlet with a bubbler as relief.",
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
        "the gel, then a doctor. In the eyes: rinse for 15 min, no gel, then a doctor. "
        f"{BREATHED_IN} Wear a face shield while it is transferred."
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
        "The mass is a planning figure: divide what the stage before really gave by it and "
        "multiply every charge of this stage by that factor."
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
        _before_the_azide(plan),
        f"Weigh {donor}, into the flask and purge with argon. {provisional}".strip(),
        toxic_sentence(acceptor),
        f"Add {writer.text('solvent')}, then {writer.text('acceptor')}, {how}.",
        sieves,
        "Stir for 30 min at room temperature under a slow stream of argon.",
        uses=("donor", "solvent", "acceptor", "sieves"),
        watch="a protected amino acid may stay a slurry until the promoter is in"
        if plan.is_amino_acid
        else "donor and alcohol dissolve; weigh back what stays on the paper",
    )


def _before_the_azide(plan: CouplingPlan) -> str:
    if not plan.has_azide:
        return ""
    return (
        "Behind a shield, with no metal spatula. The azide must be free of inorganic azide, which "
        "gives diazidomethane with dichloromethane and hydrazoic acid with acid."
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
        toxic_sentence(promoter),
        f"Add {writer.text('promoter')} "
        + (
            f"by syringe, dropwise over about {minutes} min."
            if by_syringe
            else "in one portion, quickly: it takes up water from the air."
        ),
        _rinse_syringe(writer),
        uses=("promoter", "syringe_solvent"),
        watch=_rise(by_syringe, cold),
    )
    hours = method["duration_h"]
    writer.add(
        "Let it react",
        ("Let it come to room temperature" if cold else "Keep it at room temperature")
        + f" (about {temperature['reaction']} °C) and stir under "
        f"argon for {hours['low']} to {hours['high']} h, usually {hours['usual']} h."
        + (" Keep it at or below 20 °C: it is an azide." if plan.has_azide else ""),
        "After 1 h and then every hour shake two drops with "
        + ("water" if plan.has_acid else "saturated sodium hydrogencarbonate")
        + " and ethyl acetate and spot the upper layer beside donor and alcohol.",
        _seeing(plan),
        "Or look for the ions of this stage by LC-MS.",
        watch="stop as soon as the donor has gone or stays the same between two samples: longer "
        "contact turns product into its 1,2-cis form and takes off acetyl",
        pause=UNATTENDED,
    )


def _rise(by_syringe: bool, cold: bool) -> str:
    """A solid that goes in at once cannot be slowed: only cooled."""
    if cold and by_syringe:
        return "inside not above 5 °C; slow the addition if it climbs"
    if cold:
        return "inside not above 10 °C: more ice to the bath, which stands ready before you add"
    return "a rise of more than 5 K inside: cool"


def _rinse_syringe(writer: Writer) -> str:
    """Into bicarbonate, never into plain water, with which the promoter reacts violently."""
    if not writer.has("syringe_solvent"):
        return ""
    where = "open quench, stirred"
    if writer.has("syringe_base"):
        where = "stirred bicarbonate that stands ready for it, never into the quench of plain water"
    return (
        f"Rinse syringe and needle at once with {writer.text('syringe_solvent')}, in two portions, "
        f"dropwise into the {where}."
    )


def _seeing(plan: CouplingPlan) -> str:
    plate = (
        "heptane/ethyl acetate 1:1"
        if eluent_kind(plan.target) == "eluent"
        else ("heptane/ethyl acetate 1:2")
    )
    if plan.has_acid:
        plate += " with 0.5 % of acetic acid"
    char = (
        "dip in 5 to 10 % sulfuric acid in ethanol, let the ethanol go in the hood and char with "
        "a heat gun"
    )
    if UV_GROUPS & set(plan.target.acceptor_groups) or _is_aromatic(plan):
        return (
            f"Develop in {plate}; look at 254 nm for alcohol and product, then {char}: the donor "
            "does not absorb UV."
        )
    return f"Develop in {plate}, {char}: peracetates do not absorb UV."


def _is_aromatic(plan: CouplingPlan) -> bool:
    return "c1" in plan.target.acceptor.smiles
