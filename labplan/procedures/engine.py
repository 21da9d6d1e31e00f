"""Where the stock meets the pure engine: shelf in, plan and document out. No writes."""

from dataclasses import dataclass
from datetime import date
from typing import Any

from inventory.selectors import BottleOnShelf, shelf_snapshot
from labplan.base import clock
from labplan.base.rights import Actor
from labplan.chemistry.coupling import Target, read_target
from labplan.chemistry.errors import TargetProblem
from labplan.planning.document import plan_document
from labplan.planning.plan import Plan, make_plan, wanted_from_shelf
from labplan.planning.preview import preview, preview_of_problem
from labplan.planning.values import Scale, ShelfBottle, Wishes

# the scale of a preview that names none
DEFAULT_ACCEPTOR_MMOL = 1.0
# base units in what the engine reckons with: micrograms in mg, nanolitres in mL
_BASE_UNITS = {"mass": 1_000, "volume": 1_000_000, "count": 1}


@dataclass(frozen=True)
class PlannedOn:
    """A plan and the codes of all bottles it looked at."""

    plan: Plan
    bottles_seen: tuple[str, ...]
    as_of: date

    def document(self) -> dict[str, Any]:
        return plan_document(self.plan, as_of=self.as_of)


def plan_on_shelf(
    *, actor: Actor, target: Target, scale: Scale, wishes: Wishes, as_of: date
) -> PlannedOn:
    """Take a snapshot of the shelf and plan the target on it."""
    wanted = wanted_from_shelf(target, wishes)
    snapshot = shelf_snapshot(
        actor=actor,
        inchikeys=wanted.inchikeys,
        inchikey_blocks=wanted.inchikey_blocks,
        substances=wanted.substances,
    )
    shelf = tuple(_for_engine(bottle) for bottle in snapshot)
    plan = make_plan(target, scale, shelf, as_of=as_of, wishes=wishes)
    return PlannedOn(plan, tuple(bottle.code for bottle in snapshot), as_of)


def preview_target(*, actor: Actor, smiles: str, scale: Scale, wishes: Wishes) -> dict[str, Any]:
    """What preview_on_shelf answers; a bad structure is answered in it and not raised."""
    try:
        target = read_target(smiles)
    except TargetProblem as problem:
        return preview_of_problem(problem)
    return preview_on_shelf(actor=actor, target=target, scale=scale, wishes=wishes)


def preview_on_shelf(
    *, actor: Actor, target: Target, scale: Scale, wishes: Wishes
) -> dict[str, Any]:
    """Every route to a target on the shelf as it is."""
    planned = plan_on_shelf(
        actor=actor, target=target, scale=scale, wishes=wishes, as_of=clock.today()
    )
    return preview(planned.plan)


# octyl beta-D-glucopyranoside tetraacetate: a target that every part of the engine knows
_WARM_TARGET = "CCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O"


def warm_plan() -> None:
    """Plan a target on an empty shelf, document and drawings included; RuntimeError if it fails."""
    plan = make_plan(
        read_target(_WARM_TARGET), Scale(acceptor_amount_mmol=1.0), (), as_of=clock.today(),
        wishes=Wishes(),
    )  # fmt: skip
    if plan.verdict != "plannable" or not plan_document(plan, as_of=clock.today()):
        raise RuntimeError(f"the engine cannot plan its own test target: {plan.reasons}")


def _for_engine(bottle: BottleOnShelf) -> ShelfBottle:
    unit = _BASE_UNITS[bottle.measured_by]
    values = {name: getattr(bottle, name) for name in _SAME_NAMES}
    return ShelfBottle(
        **values,
        on_hand=bottle.on_hand / unit,
        held=bottle.held / unit,
        usable=bottle.usable / unit,
    )


_SAME_NAMES = tuple(
    name for name in ShelfBottle.__dataclass_fields__ if name not in ("on_hand", "held", "usable")
)

__all__ = [
    "DEFAULT_ACCEPTOR_MMOL",
    "PlannedOn",
    "Scale",
    "Target",
    "Wishes",
    "plan_on_shelf",
    "preview_on_shelf",
    "preview_target",
    "read_target",
]
