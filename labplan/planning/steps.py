"""Write the coupling as numbered steps. Every amount printed is taken from a charge.

Order and cautions are common practice: promoter last and dropwise in the cold, the reaction
poured into open, stirred bicarbonate, never the reverse; peracetates show by charring only.
"""

from labplan.planning.figures import bulk_text, in_sentence, mass_text, three_figures, volume_text
from labplan.planning.methods import Method
from labplan.planning.values import Charge, Stage, Step
from labplan.planning.vessels import funnel_ml

MAY_STAND = "may stand overnight"
DO_NOT_STOP = "do not stop"


def amount_text(charge: Charge) -> str:
    """The amount as dispensed: the printed figure of the charge table."""
    if charge.dispense == "volume" and charge.volume_ml is not None:
        return volume_text(charge.volume_ml)
    as_printed = mass_text if charge.amount_mmol is not None else bulk_text
    return as_printed(charge.mass_mg or 0.0)


def source_text(charge: Charge) -> str:
    return f"bottle {charge.bottle.code}" if charge.bottle else "laboratory supply"


def charge_text(charge: Charge) -> str:
    """`3.51 mL of boron trifluoride diethyl etherate (bottle BFE-1)`."""
    return f"{amount_text(charge)} of {in_sentence(charge.name)} ({source_text(charge)})"


class _Writer:
    """Collects steps and numbers them; a step names the charges it uses."""

    def __init__(self, charges: tuple[Charge, ...]) -> None:
        self.by_key = {charge.key: charge for charge in charges}
        self.steps: list[Step] = []

    def text(self, key: str) -> str:
        return charge_text(self.by_key[key])

    def add(
        self, title: str, text: str, *, uses: tuple[str, ...] = (), watch: str = "", pause: str
    ) -> None:
        used = tuple(key for key in uses if key in self.by_key)
        self.steps.append(Step(len(self.steps) + 1, title, text, used, watch, pause))


def coupling_steps(stage: Stage, method: Method, product_name: str) -> tuple[Step, ...]:
    """The whole procedure of one coupling, from the empty flask to the weighed product."""
    writer = _Writer(stage.charges)
    _prepare(writer, stage)
    _charge_flask(writer, stage)
    _react(writer, method)
    _quench(writer, stage)
    _extract(writer, stage)
    _purify(writer, stage, method, product_name)
    return tuple(writer.steps)


def _prepare(writer: _Writer, stage: Stage) -> None:
    writer.add(
        "Before you start",
        "Read the supplier's safety data sheet of every bottle named here. Work in a hood with "
        "eye protection and suitable gloves. Have calcium gluconate gel, in date, within reach: "
        "BF3 etherate gives hydrogen fluoride with water. Compare each bottle's code and label "
        "with the table of charges.",
        watch="a bottle that differs from the table: stop and plan again",
        pause=MAY_STAND,
    )
    writer.add(
        "Dry the flask",
        f"Dry a {stage.vessel_ml} mL round-bottomed flask with a stirring bar and an addition "
        "funnel or septum at 120 °C for 2 h or with a heat gun in vacuum, and let it cool under "
        "dry argon or nitrogen.",
        pause=MAY_STAND,
    )


def _charge_flask(writer: _Writer, stage: Stage) -> None:
    sieves = ""
    if "sieves" in writer.by_key:
        sieves = f" Add {writer.text('sieves')}, as powder."
    writer.add(
        "Charge donor and alcohol",
        "Under argon weigh in "
        f"{writer.text('donor')}, dried to constant mass at 40 °C or below in vacuum beforehand. "
        f"Add {writer.text('solvent')}, then {writer.text('acceptor')} by "
        f"{'syringe' if writer.by_key['acceptor'].dispense == 'volume' else 'mass'}.{sieves} "
        "Stir for 30 min at room temperature.",
        uses=("donor", "solvent", "acceptor", "sieves"),
        watch="the donor dissolves; weigh back what stays on the paper",
        pause=DO_NOT_STOP,
    )


def _react(writer: _Writer, method: Method) -> None:
    duration = method["duration_h"]
    promoter = writer.by_key["promoter"]
    minutes = max(5, min(60, round((promoter.volume_ml or 1.0) * 3)))
    writer.add(
        "Add the promoter",
        f"Cool to {method['temperature_c']['addition']} °C in an ice bath. Add "
        f"{writer.text('promoter')} dropwise over about {minutes} min.",
        uses=("promoter",),
        watch="internal temperature not above 5 °C; slow the addition if it climbs",
        pause=DO_NOT_STOP,
    )
    writer.add(
        "Let it react",
        f"Let it warm to room temperature (about {method['temperature_c']['reaction']} °C) and "
        f"stir under argon for {duration['low']} to {duration['high']} h. Take a sample of two "
        "drops after 1 h and then every 2 h: shake it with saturated sodium hydrogencarbonate and "
        "ethyl acetate, spot the upper layer on TLC (heptane/ethyl acetate 1:1), dip in 5 to 10 % "
        "sulfuric acid in ethanol and char: peracetates do not absorb UV. Or look for the ions "
        "under Expectations by LC-MS.",
        watch="stop when the donor spot has gone or does not change any more between two samples",
        pause=DO_NOT_STOP,
    )


def _quench(writer: _Writer, stage: Stage) -> None:
    writer.add(
        "Quench",
        f"Stir {writer.text('quench_base')} with {writer.text('quench_water')} in an open "
        f"{stage.quench_vessel_ml} mL beaker in an ice bath; it stays a slurry. Pour the reaction "
        "in portions INTO the slurry, never the reverse, never in a closed vessel. About "
        f"{three_figures(stage.carbon_dioxide_l)} L of carbon dioxide leaves. Stir until the gas "
        "has stopped and the water layer is at pH 7 or above.",
        uses=("quench_base", "quench_water"),
        watch="foam: wait between portions; the water layer contains fluoride, never acidify it",
        pause=DO_NOT_STOP,
    )


def _extract(writer: _Writer, stage: Stage) -> None:
    sieves = (
        " Filter off the sieves through a sintered funnel." if "sieves" in writer.by_key else ""
    )
    extraction = writer.by_key["extraction_solvent"]
    largest_ml = (writer.by_key["solvent"].volume_ml or 0) + (
        writer.by_key["quench_water"].volume_ml or 0
    )
    writer.add(
        "Extract",
        f"{sieves.strip()} Separate the layers in a {funnel_ml(largest_ml)} mL funnel, venting it "
        f"often. Extract the water layer three times with a third each of "
        f"{charge_text(extraction)}. Wash the combined organic layers once with brine made from "
        f"{writer.text('brine_salt')} and {writer.text('brine_water')}.".strip(),
        uses=("extraction_solvent", "brine_salt", "brine_water"),
        watch="the lower layer is the dichloromethane",
        pause=DO_NOT_STOP,
    )
    writer.add(
        "Dry and concentrate",
        f"Dry the organic layer over {writer.text('drying_agent')} for 15 min, filter, and "
        "evaporate on a rotary evaporator at a bath of 40 °C or below. Weigh the crude; about "
        f"{mass_text(round(stage.gross_crude_mg))} is the most that can be there.",
        uses=("drying_agent",),
        watch="do not leave the crude on damp acid or silica overnight; dry and cold it keeps",
        pause=MAY_STAND,
    )


def _purify(writer: _Writer, stage: Stage, method: Method, product_name: str) -> None:
    eluents = tuple(key for key in writer.by_key if key.startswith("eluent_"))
    amounts = " and ".join(writer.text(key) for key in eluents)
    left_over = " ".join(method["left_over"])
    writer.add(
        "Purify",
        f"Pack a column of {writer.text('silica')}. Elute with mixtures of {amounts}, from "
        f"{method['purification']['gradient']} by volume. {left_over}",
        uses=("silica", *eluents),
        watch="char the TLC of the fractions; pool only what shows one spot",
        pause=DO_NOT_STOP,
    )
    writer.add(
        "Dry, weigh and record",
        f"Evaporate the pure fractions at 40 °C or below, dry to constant mass in vacuum and "
        f"weigh. Expected: {mass_text(round(stage.expected_mass_mg))} of {product_name} "
        f"({mass_text(round(stage.expected_low_mg))} to "
        f"{mass_text(round(stage.expected_high_mg))}). Enter what was really weighed and measured. "
        "Organic layers and eluent with dichloromethane go to halogenated waste; the water layers "
        "to the aqueous fluoride waste, not acidified; silica and sieves to solid waste once the "
        "solvent is off.",
        watch="the waste rules of your house come first",
        pause=MAY_STAND,
    )
