"""From a target, a scale and a shelf to routes. A pure function of its arguments and the data."""

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from datetime import date

from labplan.chemistry.coupling import Target
from labplan.chemistry.donors import difference_from_donor
from labplan.planning import vessels
from labplan.planning.bottles import check_usable
from labplan.planning.expectations import expect
from labplan.planning.figures import in_sentence, mass_text
from labplan.planning.methods import (
    Method,
    acetylation_for,
    deacetylation_method,
    fitting_couplings,
    group_cautions,
    later_cautions,
    method_row,
    solvent_of,
)
from labplan.planning.rounding import LEAST_WEIGHABLE_MG, SOLID_STEP_MG, round_to_step
from labplan.planning.sizing import Sizer, TooSmall
from labplan.planning.stages.acetylation import (
    AcetylationPlan,
    made_donor_content,
    size_acetylation,
    sugar_need,
)
from labplan.planning.stages.acetylation_steps import acetylation_steps
from labplan.planning.stages.coupling import (
    CouplingPlan,
    acceptor_equivalents,
    donor_need,
    size_coupling,
)
from labplan.planning.stages.coupling_steps import coupling_steps
from labplan.planning.stages.deacetylation import DeacetylationPlan, size_deacetylation
from labplan.planning.stages.deacetylation_steps import deacetylation_steps
from labplan.planning.values import (
    Expectations,
    PassedOver,
    Reason,
    Route,
    RouteWarning,
    Scale,
    ShelfBottle,
    Stage,
    Step,
    Wishes,
)

GEL = "calcium-gluconate-gel"
NO_WISHES = Wishes()


@dataclass(frozen=True)
class Wanted:
    """What the shelf has to be asked for before a target can be planned."""

    inchikeys: frozenset[str]
    inchikey_blocks: frozenset[str]  # first blocks, to see what must not be mistaken
    substances: frozenset[str]


@dataclass(frozen=True)
class Plan:
    """`verdict` is "plannable" or "not_plannable"; `routes` is empty in the second case.

    The routes stand best first: what the shelf can meet before what it cannot, then by the
    method's rank.
    """

    target: Target
    verdict: str
    reasons: tuple[Reason, ...]
    routes: tuple[Route, ...]
    expectations: Expectations | None

    @property
    def route(self) -> Route | None:
        return self.routes[0] if self.routes else None


def wanted_from_shelf(target: Target, wishes: Wishes = NO_WISHES) -> Wanted:
    """All substances that any route to this target could charge, and the target itself."""
    couplings, _ = fitting_couplings(target, wishes)
    methods = list(couplings)
    acetylation = acetylation_for(target)
    if couplings and acetylation is not None:
        methods.append(acetylation)
    if couplings and target.needs_deacetylation:
        methods.append(deacetylation_method())
    keys = {target.donor.inchikey, target.acceptor.inchikey, target.structure.inchikey,
            target.glycoside.inchikey}  # fmt: skip
    substances = {name for method in methods for name in _substances_in(method)}
    if couplings and target.residue is not None:
        substances |= {target.residue.key, GEL}
    blocks = {target.donor.inchikey.split("-")[0]} if couplings else set()
    return Wanted(frozenset(keys), frozenset(blocks), frozenset(substances))


_SUBSTANCE_FIELDS = (
    "substance", "bicarbonate", "extraction_solvent", "acid_extraction_solvent",
    "brine_salt", "drying_agent", "drying_solvent", "silica", "filter_aid", "reducing_agent",
)  # fmt: skip


def _substances_in(value: object) -> set[str]:
    """Every substance key that a method row names, wherever it stands."""
    if isinstance(value, list):
        return {name for item in value for name in _substances_in(item)}
    if not isinstance(value, dict):
        return set()
    found = {str(value[name]) for name in _SUBSTANCE_FIELDS if isinstance(value.get(name), str)}
    found |= set(map(str, value.get("substances", [])))
    for item in value.values():
        found |= _substances_in(item)
    return found


def make_plan(
    target: Target,
    scale: Scale,
    shelf: tuple[ShelfBottle, ...],
    *,
    as_of: date,
    wishes: Wishes = NO_WISHES,
) -> Plan:
    """Plan one target. Neither the order of the shelf nor the time of day changes the answer."""
    shelf = tuple(sorted(shelf, key=lambda bottle: bottle.code))
    couplings, reasons = fitting_couplings(target, wishes)
    if not couplings:
        return Plan(target, "not_plannable", reasons, (), None)
    attempts = [_Attempt(target, scale, shelf, as_of, wishes, method) for method in couplings]
    sized = [attempt.route() for attempt in attempts]
    unfit = sized[0][1]
    if unfit and not any(route and route.is_available for route, _ in sized):
        return Plan(target, "not_plannable", unfit, (), None)
    found = [route for route, _ in sized if route is not None]
    found.sort(key=lambda route: (not route.is_available, route.rank))
    found = [_explained(found[0], sized[0][0]), *found[1:]]
    routes = tuple(replace(route, rank=i) for i, route in enumerate(found, start=1))
    return Plan(
        target, "plannable", (), routes, expect(target, routes[0].stages, _halide(routes[0]))
    )


def _explained(best: Route, first: Route | None) -> Route:
    """Say it when the way that usually comes first is not the one taken, and why."""
    if first is None or best.method == first.method or best.shortages:
        return best
    missing = ", ".join(shortage.name for shortage in first.shortages)
    second = RouteWarning(
        "second_choice",
        "caution",
        f"{first.method_name} would come first but the shelf is short of {missing}; planned with "
        f"{best.method_name} instead.",
    )
    return replace(best, warnings=(second, *best.warnings))


def _halide(route: Route) -> str | None:
    """The halide of the promoter, which can end up on the donor."""
    halide: str | None = method_row(route.method)["promoter"]["halide"]
    return halide


class _Attempt:
    """One coupling method on one shelf, with the stages before and after it."""

    def __init__(
        self,
        target: Target,
        scale: Scale,
        shelf: tuple[ShelfBottle, ...],
        as_of: date,
        wishes: Wishes,
        method: Method,
    ) -> None:
        self.target, self.method, self.as_of = target, method, as_of
        self.scale = scale
        self.sizer = Sizer(shelf, as_of)
        self.solvent = solvent_of(method, wishes)
        self.after = deacetylation_method() if target.needs_deacetylation else None
        self.donor_mmol = self._donor_mmol(scale)
        self.before = self._acetylation_if_needed()

    def _donor_mmol(self, scale: Scale) -> float:
        """Back from what is wanted to the limiting donor [mmol], over the planned yields."""
        if scale.product_mass_mg is None:
            assert scale.acceptor_amount_mmol is not None
            return scale.acceptor_amount_mmol / acceptor_equivalents(self.target, self.method)
        amount = scale.product_mass_mg / self.target.structure.molar_mass_g_per_mol
        for method in (self.after, self.method):
            if method is not None:
                amount /= float(method["yield_pct"]["planned"]) / 100
        return amount

    def _acetylation_if_needed(self) -> Method | None:
        """The stage before, when no bottle of the donor will do but the free sugar would."""
        self.sizer.begin_stage("coupling")
        donor = donor_need(self.target, self.donor_mmol)
        if self.sizer.can_meet(donor):
            return None
        method = acetylation_for(self.target)
        if method is None:
            return None
        plan = AcetylationPlan(self.target, method, self.donor_mmol, 1)
        if not self.sizer.can_meet(sugar_need(self.target, plan.sugar_mmol)):
            return None
        self.sizer.pass_over(donor)
        return method

    def route(self) -> tuple[Route | None, tuple[Reason, ...]]:
        """The sized route, with its shortages; None with the reasons when the scale is unfit."""
        stages, warnings = self._stages()
        unfit = _too_small(self.sizer.too_small, self.scale) + _too_large(stages)
        if unfit:
            return None, unfit
        route = Route(
            rank=int(self.method["rank"]),
            method=self.method["key"],
            method_name=self.method["name"],
            stages=tuple(stages),
            why=self._why(),
            warnings=tuple(dict.fromkeys([*warnings, *self._notes()])),
            shortages=tuple(self.sizer.shortages),
            passed_over=tuple(dict.fromkeys([*self._mistakable(), *self.sizer.passed_over])),
        )
        return route, ()

    def _stages(self) -> tuple[list[Stage], list[RouteWarning]]:
        """Coupling first, since its rounded donor sets the stage before; then that, then after."""
        number = 2 if self.before else 1
        made = made_donor_content(self.target, self.before) if self.before else None
        coupling_plan = CouplingPlan(
            self.target, self.method, self.solvent, self.donor_mmol, number, made
        )
        coupling, warnings = size_coupling(coupling_plan, self.sizer)
        gel = self._gel()
        sized: list[tuple[Stage | None, Callable[[Stage], tuple[Step, ...]]]] = [
            (coupling, lambda stage: coupling_steps(coupling_plan, stage, gel))
        ]
        donor_n = coupling.scale_mmol if coupling else self.donor_mmol
        if self.before is not None:
            before_plan = AcetylationPlan(self.target, self.before, donor_n, 1)
            before, more = size_acetylation(before_plan, self.sizer)
            warnings = [*more, *warnings]
            sized.insert(0, (before, lambda stage: acetylation_steps(before_plan, stage)))
        if self.after is not None:
            glycoside_n = donor_n * float(self.method["yield_pct"]["planned"]) / 100
            after_plan = DeacetylationPlan(self.target, self.after, glycoside_n, number + 1)
            after, more = size_deacetylation(after_plan, self.sizer)
            warnings = [*warnings, *more]
            sized.append((after, lambda stage: deacetylation_steps(after_plan, stage)))
        if self.sizer.shortages or self.sizer.too_small:
            return [], warnings
        return [replace(stage, steps=write(stage)) for stage, write in sized if stage], warnings

    def _gel(self) -> ShelfBottle | None:
        """A bottle of calcium gluconate gel that is in date."""
        return next(
            (
                bottle
                for bottle in self.sizer.shelf
                if bottle.substance == GEL
                and bottle.usable > 0
                and check_usable(bottle, self.as_of) is None
            ),
            None,
        )

    def _why(self) -> tuple[str, ...]:
        target = self.target
        sugar = target.residue_name or "the sugar"
        promoter = self.method["promoter"]
        lines = [
            f"The target is the {target.anomer} glycoside of {sugar}, {target.relation}: the "
            "acetate at C-2 of the peracetate directs the alcohol to that side.",
            f"The {target.acceptor_oh} alcohol {target.acceptor_name or target.acceptor.smiles} "
            f"and the peracetate are joined by {promoter['short']}, {promoter['equiv']:g} equiv "
            f"per {promoter['basis']}.",
        ]
        if target.acceptor_acids:
            lines.append("Each mole of free carboxylic acid takes up one more mole of promoter.")
        if self.before is not None:
            lines.append(
                "No bottle of the peracetate holds enough; it is made first from the free sugar, "
                f"with {self.before['name']}."
            )
        if target.needs_deacetylation:
            lines.append(
                "The target has free hydroxyls: the acetates are taken off after the coupling, "
                f"with {self.after['name'] if self.after else ''}."
            )
        return tuple(lines)

    def _notes(self) -> list[RouteWarning]:
        found = [*group_cautions(self.target, self.method), *later_cautions(self.target)]
        if self.method["promoter"]["gel"] and self._gel() is None:
            found.append(
                RouteWarning(
                    "no_gluconate_gel",
                    "stop",
                    "No calcium gluconate gel in date is on the shelf: do not open BF3 etherate "
                    "before there is.",
                )
            )
        made = sorted(
            bottle.code
            for bottle in self.sizer.shelf
            if bottle.inchikey == self.target.structure.inchikey and bottle.usable > 0
        )
        if made:
            found.append(
                RouteWarning(
                    "target_on_shelf",
                    "note",
                    f"The target itself stands on the shelf: {', '.join(made)}. Look there first.",
                )
            )
        return found

    def _mistakable(self) -> list[PassedOver]:
        """Bottles that look like the donor by formula and first InChIKey block, and are not."""
        donor = self.target.donor
        block = donor.inchikey.split("-")[0]
        found = []
        for bottle in self.sizer.shelf:
            if bottle.inchikey and bottle.inchikey.startswith(block) and bottle.smiles:
                difference = difference_from_donor(donor.smiles, bottle.smiles)
                if difference is not None:
                    found.append(PassedOver(bottle.code, bottle.name, "donor", difference))
        return found


def _too_small(found: list[TooSmall], scale: Scale) -> tuple[Reason, ...]:
    """Which charges are too small, and from which scale on none of them would be."""
    if not found:
        return ()
    weighed = _names(line for line in found if not line.is_solution)
    measured = _names(line for line in found if line.is_solution)
    # The least that each can have been before it was rounded.
    half_step = SOLID_STEP_MG / 2
    factor = LEAST_WEIGHABLE_MG / min(max(line.mass_mg - half_step, half_step) for line in found)
    parts = (
        f"Too little to weigh well (under 20 mg): {weighed}." if weighed else "",
        f"Too little to measure (under 0.05 mL and 20 mg): the solution of {measured}; thin it "
        "with its own dry solvent and book that as a bottle."
        if measured
        else "",
        f"Ask for about {_least_scale(scale, factor)} or more.",
    )
    return (Reason("below_least_weighable", " ".join(part for part in parts if part)),)


def _names(found: Iterable[TooSmall]) -> str:
    return ", ".join(dict.fromkeys(in_sentence(line.name) for line in found))


def _least_scale(scale: Scale, factor: float) -> str:
    """The scale times a factor, to two figures and upwards: every charge goes with it."""
    wanted = scale.product_mass_mg or scale.acceptor_amount_mmol or 0.0
    # A little more: what it is reckoned from is rounded too.
    exact = wanted * factor * 1.02
    step = 10.0 ** (math.floor(math.log10(exact)) - 1)
    least = round_to_step(exact, step, outward=True)
    if scale.product_mass_mg is not None:
        return f"{mass_text(least)} of product"
    return f"{least:g} mmol of acceptor"


def _too_large(stages: list[Stage]) -> tuple[Reason, ...]:
    """What does not fit one flask or one open beaker is several runs."""
    if all(_fits_one_flask(stage) for stage in stages):
        return ()
    return (
        Reason(
            "above_one_flask",
            "The reaction does not fit one flask and one open quench vessel of 10 L; ask for "
            "less, in several runs.",
        ),
    )


def _fits_one_flask(stage: Stage) -> bool:
    quench_fits = stage.quench is None or stage.quench.vessel_ml < vessels.BEAKERS_ML[-1]
    return quench_fits and stage.vessel_ml < vessels.FLASKS_ML[-1]
