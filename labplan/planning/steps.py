"""Write numbered steps. Every amount printed is taken from a charge."""

from labplan.planning.figures import (
    bulk_text,
    bulk_volume_text,
    in_sentence,
    mass_text,
    volume_text,
)
from labplan.planning.values import Charge, Step
from labplan.safety.hazards import acute_toxicity

MAY_STAND = "may stand overnight"
DO_NOT_STOP = "do not stop"
UNATTENDED = "may stir overnight, under your house's rule for unattended reactions"


BREATHED_IN = (
    "Breathed in: fresh air and a doctor at once, even if well (the lungs can fill hours later)."
)


def toxic_sentence(charge: Charge) -> str:
    """What the step that opens a bottle says of a substance that is fatal or toxic, else ""."""
    found = acute_toxicity(charge.substance)
    if found is None:
        return ""
    word, routes, codes = found
    how = " or ".join((", ".join(routes[:-1]), routes[-1])) if routes[1:] else routes[0]
    return (
        f"{charge.name} is {word} {how} ({', '.join(codes)}): hood and the right gloves; after any "
        "contact a doctor at once."
    )


def amount_text(charge: Charge) -> str:
    """The amount as dispensed: the printed figure of the charge table."""
    is_reacting = charge.amount_mmol is not None
    if charge.dispense == "volume" and charge.volume_ml is not None:
        return (volume_text if is_reacting else bulk_volume_text)(charge.volume_ml)
    return (mass_text if is_reacting else bulk_text)(charge.mass_mg or 0.0)


def source_text(charge: Charge) -> str:
    if charge.from_stage is not None:
        return f"from stage {charge.from_stage}"
    return f"bottle {charge.bottle.code}" if charge.bottle else "laboratory supply"


def name_text(charge: Charge) -> str:
    """The name, and the form of what is weighed where that is not the neat substance."""
    name = in_sentence(charge.name)
    form = charge.bottle.form_label if charge.bottle else "neat"
    return name if form == "neat" else f"{name}, {form}"


def charge_text(charge: Charge) -> str:
    """`3.51 mL of boron trifluoride diethyl etherate (bottle BFE-1)`."""
    return f"{amount_text(charge)} of {name_text(charge)} ({source_text(charge)})"


class Writer:
    """Collects steps and numbers them; a step names the charges it uses."""

    def __init__(self, charges: tuple[Charge, ...]) -> None:
        self.by_key = {charge.key: charge for charge in charges}
        self.steps: list[Step] = []

    def has(self, key: str) -> bool:
        return key in self.by_key

    def text(self, key: str) -> str:
        return charge_text(self.by_key[key])

    def amount(self, key: str) -> str:
        return amount_text(self.by_key[key])

    def add(
        self,
        title: str,
        *sentences: str,
        uses: tuple[str, ...] = (),
        watch: str = "",
        pause: str = DO_NOT_STOP,
    ) -> None:
        """Add a step; empty sentences are left out, keys without a charge too."""
        used = tuple(key for key in uses if key in self.by_key)
        text = " ".join(sentence for sentence in sentences if sentence)
        self.steps.append(Step(len(self.steps) + 1, title, text, used, watch, pause))
