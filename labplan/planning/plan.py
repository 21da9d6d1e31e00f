"""From a target, a scale and a shelf to a route. A pure function of its arguments and the data."""

from dataclasses import dataclass, replace
from datetime import date

from labplan.chemistry.coupling import Target
from labplan.planning import vessels
from labplan.planning.coupling_stage import donor_amount_mmol, size_coupling
from labplan.planning.expectations import expect
from labplan.planning.methods import Method, find_method
from labplan.planning.steps import coupling_steps
from labplan.planning.values import (
    Expectations,
    Reason,
    Route,
    RouteWarning,
    Scale,
    ShelfBottle,
    Stage,
)


@dataclass(frozen=True)
class Wanted:
    """What the shelf has to be asked for before a target can be planned."""

    inchikeys: frozenset[str]
    substances: frozenset[str]


@dataclass(frozen=True)
class Plan:
    """`verdict` is "plannable" or "not_plannable"; `route` is None in the second case."""

    target: Target
    verdict: str
    reasons: tuple[Reason, ...]
    method: Method | None
    route: Route | None
    expectations: Expectations | None


def wanted_from_shelf(target: Target) -> Wanted:
    """All substances that any method for this target could charge, and the target itself."""
    method, _ = find_method(target)
    keys = {target.donor.inchikey, target.acceptor.inchikey, target.structure.inchikey}
    substances: set[str] = set()
    if method is not None:
        work_up, column = method["work_up"], method["purification"]
        substances = {
            method["promoter"]["substance"],
            method["solvent"]["substance"],
            *method["sieves"]["substances"],
            work_up["bicarbonate"],
            work_up["extraction_solvent"],
            work_up["brine_salt"],
            work_up["drying_agent"],
            column["silica"],
            *(part["substance"] for part in column["eluent"]),
        }
    return Wanted(frozenset(keys), frozenset(substances))


def make_plan(target: Target, scale: Scale, shelf: tuple[ShelfBottle, ...], *, as_of: date) -> Plan:
    """Plan one target. Neither the order of the shelf nor the time of day changes the answer."""
    method, reasons = find_method(target)
    if method is None:
        return Plan(target, "not_plannable", reasons, None, None, None)
    donor_mmol = donor_amount_mmol(target, method, scale)
    sized = size_coupling(target, method, donor_mmol, shelf, as_of)
    unfit = _too_small(sized.too_small) + _too_large(sized.stage)
    if unfit:
        return Plan(target, "not_plannable", unfit, method, None, None)
    if sized.stage is None:
        route = Route((), _why(target, method), (), sized.shortages, sized.passed_over)
        return Plan(target, "plannable", (), method, route, expect(target))
    name = target.name or "the product"
    stage = replace(sized.stage, steps=coupling_steps(sized.stage, method, name))
    warnings = (*sized.warnings, *_group_cautions(target, method), *_shelf_notes(target, shelf))
    route = Route((stage,), _why(target, method), warnings, (), sized.passed_over)
    return Plan(target, "plannable", (), method, route, expect(target))


def _too_small(names: tuple[str, ...]) -> tuple[Reason, ...]:
    if not names:
        return ()
    return (
        Reason(
            "below_least_weighable",
            f"Too little to weigh well (under 20 mg): {', '.join(names)}. Ask for more.",
        ),
    )


def _too_large(stage: Stage | None) -> tuple[Reason, ...]:
    """What does not fit one flask or one open beaker is several runs."""
    if stage is None or (
        stage.quench_vessel_ml < vessels.BEAKERS_ML[-1] and stage.vessel_ml < vessels.FLASKS_ML[-1]
    ):
        return ()
    return (
        Reason(
            "above_one_flask",
            "The reaction does not fit one flask and one open quench vessel of 10 L; ask for "
            "less, in several runs.",
        ),
    )


def _why(target: Target, method: Method) -> tuple[str, ...]:
    sugar = target.residue_name or "the sugar"
    return (
        f"The target is the {target.anomer} glycoside of {sugar}, which is {target.relation}: the "
        "acetate at C-2 of the peracetate directs the alcohol to that side.",
        f"The {target.acceptor_oh} alcohol {target.acceptor_name or target.acceptor.smiles} and "
        f"the per-O-acetate are joined by {method['name']}, "
        f"{method['promoter']['equiv']:g} equiv per {method['promoter']['basis']}.",
        "The acetates of the target are those of the donor: no stage before or after is needed.",
    )


def _group_cautions(target: Target, method: Method) -> tuple[RouteWarning, ...]:
    return tuple(
        RouteWarning(
            f"{group.replace(' ', '_')}_present", "caution", method["cautions"][group] + "."
        )
        for group in target.acceptor_groups
        if group in method["cautions"]
    )


def _shelf_notes(target: Target, shelf: tuple[ShelfBottle, ...]) -> tuple[RouteWarning, ...]:
    made = sorted(
        bottle.code
        for bottle in shelf
        if bottle.inchikey == target.structure.inchikey and bottle.usable > 0
    )
    if not made:
        return ()
    return (
        RouteWarning(
            "target_on_shelf",
            "note",
            f"The target itself stands on the shelf: {', '.join(made)}. Look there first.",
        ),
    )
