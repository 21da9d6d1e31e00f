"""Turn a need (role, substance, amount) into a charge on a chosen bottle.

The limiting charge is rounded first and its amount of substance recomputed from the rounded
mass; everything else follows from that (common practice).
"""

from dataclasses import dataclass, replace
from datetime import date

from labplan.chemistry import amounts
from labplan.chemistry.amounts import Content
from labplan.planning import rounding
from labplan.planning.bottles import Check, Choice, choose_bottle
from labplan.planning.figures import bulk_text, bulk_volume_text
from labplan.planning.values import Charge, PassedOver, ShelfBottle, Shortage

_ASSAY_NAMES = {"titration": "titration", "qnmr": "qNMR", "against_standard": "against a standard"}


@dataclass(frozen=True)
class Need:
    """What one charge asks for: `amount_mmol` of the substance, or a bulk mass or volume."""

    key: str
    role: str
    group: str
    substances: tuple[str, ...]  # any of these keys will do, in order of preference
    name: str
    inchikey: str | None = None
    amount_mmol: float | None = None
    bulk_mass_mg: float | None = None
    bulk_volume_ml: float | None = None
    equivalents_planned: float | None = None
    equivalents_of: str | None = None
    outward: bool = False
    checks: tuple[Check, ...] = ()
    prefer_dry: bool = False
    optional: bool = False
    as_another: bool = False  # a second share of another need: what is passed over is said there


@dataclass(frozen=True)
class TooSmall:
    """A charge under the least weighable mass, a solution too small for the syringe among them."""

    name: str
    mass_mg: float
    is_solution: bool


class Sizer:
    """Collects charges, shortages and bottles passed over for a route, stage by stage.

    A bottle used for two charges counts once: what the first took is gone.
    """

    def __init__(self, shelf: tuple[ShelfBottle, ...], as_of: date) -> None:
        self.shelf = shelf
        self.as_of = as_of
        self._taken: dict[str, float] = {}
        self._stage = ""
        self.charges: dict[str, Charge] = {}
        self.shortages: list[Shortage] = []
        self.passed_over: list[PassedOver] = []
        self.too_small: list[TooSmall] = []

    def begin_stage(self, kind: str) -> None:
        """Start a new set of charges; what earlier stages took stays taken."""
        self._stage = kind
        self.charges = {}

    def can_meet(self, need: Need) -> bool:
        """Whether a bottle fits this need, without taking it."""
        return self._choose(need).bottle is not None

    def pass_over(self, need: Need) -> None:
        """Note the bottles that do not fit this need, which is met in another way."""
        self.passed_over += self._choose(need).passed_over

    def add(self, need: Need) -> Charge | None:
        """Choose a bottle and size the charge; without a bottle note the shortage, size it bare."""
        choice = self._choose(need)
        if not need.as_another:
            self.passed_over += choice.passed_over
        if choice.bottle is None:
            if not need.optional:
                self.shortages.append(_shortage(self._stage, need, choice))
            return None
        charge = size_charge(need, choice.bottle)
        taken = charge.mass_mg if choice.bottle.measured_by == "mass" else charge.volume_ml
        code = choice.bottle.code
        self._taken[code] = self._taken.get(code, 0.0) + (taken or 0.0)
        self._keep(charge)
        return charge

    def add_made(
        self, need: Need, content: Content, *, from_stage: int, weighed_out: bool
    ) -> Charge:
        """A charge that an earlier stage gives: weighed out of it, or all of it as it comes."""
        assert need.amount_mmol is not None
        mass = amounts.mass_mg(need.amount_mmol, content)
        if weighed_out:
            mass = rounding.round_mass_mg(mass)
        charge = _charge(
            need,
            None,
            mass_mg=mass,
            amount_mmol=amounts.amount_mmol(mass, content),
            dispense="mass",
            hold=0,
        )
        assay = ""
        if content.assay_pct is not None:
            assay = f"; {content.assay_pct:g} % planned, to be measured"
        if content.active_share_pct is not None:
            assay += f", {content.active_share_pct:g} % of it the form that reacts"
        self._keep(
            replace(charge, from_stage=from_stage, assay_note=f"from stage {from_stage}{assay}")
        )
        return self.charges[need.key]

    def add_supply(self, need: Need) -> Charge:
        """A charge from the tap of the laboratory: water, ice. No bottle, nothing held."""
        volume = rounding.round_volume_ml(need.bulk_volume_ml or 0.0)
        charge = _charge(need, None, volume_ml=volume, dispense="volume", hold=0)
        self.charges[need.key] = charge
        return charge

    def _keep(self, charge: Charge) -> None:
        self.charges[charge.key] = charge
        if is_too_small(charge):
            form = charge.bottle.content.form if charge.bottle and charge.bottle.content else ""
            self.too_small.append(
                TooSmall(charge.name, charge.mass_mg or 0.0, is_solution=form == "solution")
            )

    def _choose(self, need: Need) -> Choice:
        return choose_bottle(
            self._bottles_for(need),
            role=need.role,
            as_of=self.as_of,
            needed_in=lambda bottle: _amount_in_bottle(need, bottle),
            checks=need.checks,
            prefer_dry=need.prefer_dry,
        )

    def _bottles_for(self, need: Need) -> list[ShelfBottle]:
        fitting = [
            bottle
            for bottle in self.shelf
            if (need.inchikey and bottle.inchikey == need.inchikey)
            or bottle.substance in need.substances
        ]
        return [
            replace(bottle, usable=bottle.usable - self._taken.get(bottle.code, 0.0))
            for bottle in fitting
        ]


def is_too_small(charge: Charge) -> bool:
    """A reacting charge that is weighed, under the least weighable mass."""
    return (
        charge.amount_mmol is not None
        and charge.dispense == "mass"
        and (charge.mass_mg or 0.0) < rounding.LEAST_WEIGHABLE_MG
    )


def size_charge(need: Need, bottle: ShelfBottle) -> Charge:
    """Size and round one charge on a known bottle."""
    if need.amount_mmol is not None:
        return _reacting_charge(need, bottle)
    if need.bulk_volume_ml is not None:
        return _bulk_volume_charge(need, bottle)
    mass = rounding.round_bulk_mg(need.bulk_mass_mg or 0.0)
    return _charge(need, bottle, mass_mg=mass, dispense="mass", hold=round(mass * 1000))


def _reacting_charge(need: Need, bottle: ShelfBottle) -> Charge:
    assert bottle.content is not None
    assert need.amount_mmol is not None
    exact_mg = amounts.mass_mg(need.amount_mmol, bottle.content)
    volume = None
    if bottle.measured_by == "volume":
        volume = amounts.volume_ml(exact_mg, _density(bottle))
    by_mass = volume is None or volume < rounding.LEAST_VOLUME_ML
    if by_mass:
        mass = rounding.round_mass_mg(exact_mg, outward=need.outward)
        volume = amounts.volume_ml(mass, _density(bottle)) if volume is not None else None
    else:
        volume = rounding.round_volume_ml(volume or 0.0, outward=need.outward)
        mass = amounts.mass_mg_of_volume(volume, _density(bottle))
    return _charge(
        need,
        bottle,
        mass_mg=mass,
        volume_ml=volume,
        amount_mmol=amounts.amount_mmol(mass, bottle.content),
        dispense="mass" if by_mass else "volume",
        hold=round(mass * 1000) if volume is None else round(volume * 1_000_000),
    )


def _bulk_volume_charge(need: Need, bottle: ShelfBottle) -> Charge:
    assert need.bulk_volume_ml is not None
    volume = rounding.round_volume_ml(need.bulk_volume_ml, outward=need.outward)
    if bottle.measured_by == "mass":
        mass = amounts.mass_mg_of_volume(volume, _density(bottle))
        return _charge(need, bottle, mass_mg=mass, volume_ml=volume, dispense="volume",
                       hold=round(mass * 1000))  # fmt: skip
    return _charge(need, bottle, volume_ml=volume, dispense="volume",
                   hold=round(volume * 1_000_000))  # fmt: skip


def _charge(
    need: Need,
    bottle: ShelfBottle | None,
    *,
    dispense: str,
    hold: int,
    mass_mg: float | None = None,
    volume_ml: float | None = None,
    amount_mmol: float | None = None,
) -> Charge:
    equivalents = None
    if amount_mmol is not None and need.amount_mmol and need.equivalents_planned:
        equivalents = need.equivalents_planned * amount_mmol / need.amount_mmol
    if equivalents is not None and need.equivalents_of == need.key:
        equivalents = need.equivalents_planned  # the limiting charge is its own measure
    return Charge(
        key=need.key,
        role=need.role,
        group=need.group,
        substance=bottle.substance if bottle else next(iter(need.substances), "made here"),
        name=bottle.name if bottle else need.name,
        bottle=bottle,
        from_stage=None,
        equivalents_planned=need.equivalents_planned,
        equivalents=equivalents,
        equivalents_of=need.equivalents_of,
        amount_mmol=amount_mmol,
        mass_mg=mass_mg,
        volume_ml=volume_ml,
        dispense=dispense,
        assay_note=_assay_note(bottle, reacting=need.amount_mmol is not None),
        hold_amount=hold,
    )


def _amount_in_bottle(need: Need, bottle: ShelfBottle) -> float | None:
    """What the need comes to in the bottle's own unit, None when the label does not allow it."""
    if need.amount_mmol is not None and bottle.content is None:
        return None
    needs_density = (bottle.measured_by == "volume") == (need.bulk_volume_ml is None)
    if needs_density and bottle.density_g_per_ml is None:
        return None
    if bottle.measured_by == "count" or (
        need.bulk_mass_mg is not None and bottle.measured_by == "volume"
    ):
        return None
    return size_charge(need, bottle).hold_amount / (
        1000 if bottle.measured_by == "mass" else 1_000_000
    )


def _density(bottle: ShelfBottle) -> float:
    assert bottle.density_g_per_ml is not None
    return bottle.density_g_per_ml


def _assay_note(bottle: ShelfBottle | None, *, reacting: bool) -> str:
    if bottle is None or bottle.content is None or not reacting:
        return ""
    content = bottle.content
    share = amounts.mass_fraction(content)
    if content.form == "solution":
        return f"{bottle.form_label}, {share * 100:.3g} % by mass"
    if content.assay_pct is None:
        return "no assay on the label: taken as 100 %"
    if content.assay_kind == "area_pct":
        return f"{content.assay_pct:g} area-%, not used for the amount"
    if content.assay_kind not in amounts.MASS_FRACTION_ASSAYS:
        return f"{content.assay_pct:g} %, kind not known, not used for the amount"
    of = "" if content.assay_of == "as_is" else f" as {content.assay_of}"
    exact = "" if abs(share * 100 - content.assay_pct) < 0.005 else f" = {share * 100:.2f} %"
    return f"{content.assay_pct:g} %{of}{exact} ({_ASSAY_NAMES[content.assay_kind]})"


def _shortage(stage: str, need: Need, choice: Choice) -> Shortage:
    needed = _needed_text(need)
    if not choice.passed_over:
        detail = f"there is no bottle of {need.name} on the shelf"
    elif not choice.fit_exists:
        detail = "no bottle is fit for this: " + "; ".join(
            f"{p.bottle} {p.reason}" for p in choice.passed_over
        )
    else:
        detail = "no single bottle holds enough: " + "; ".join(
            f"{p.bottle} {p.reason}" for p in choice.passed_over
        )
    largest = choice.largest_text if choice.fit_exists else "none"
    return Shortage(
        stage,
        need.role,
        need.substances[0] if need.substances else "",
        need.name,
        needed,
        largest,
        detail,
    )


def _needed_text(need: Need) -> str:
    if need.amount_mmol is not None:
        return f"{need.amount_mmol:.4g} mmol"
    if need.bulk_volume_ml is not None:
        return bulk_volume_text(rounding.round_volume_ml(need.bulk_volume_ml, outward=need.outward))
    return bulk_text(rounding.round_bulk_mg(need.bulk_mass_mg or 0.0))
