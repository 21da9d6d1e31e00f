"""Where the stock meets the pure engine: shelf in, plan and document out. No writes."""

from dataclasses import dataclass
from datetime import date
from typing import Any

from inventory.selectors import BottleOnShelf, shelf_snapshot
from labplan.base.rights import Actor
from labplan.chemistry.coupling import Target, read_target
from labplan.planning.document import plan_document
from labplan.planning.plan import Plan, make_plan, wanted_from_shelf
from labplan.planning.values import Scale, ShelfBottle

# base units in what the engine reckons with: micrograms in mg, nanolitres in mL
_BASE_UNITS = {"mass": 1_000, "volume": 1_000_000, "count": 1}


@dataclass(frozen=True)
class PlannedOn:
    """A plan with its document and the codes of all bottles it looked at."""

    plan: Plan
    document: dict[str, Any]
    bottles_seen: tuple[str, ...]


def plan_on_shelf(*, actor: Actor, target: Target, scale: Scale, as_of: date) -> PlannedOn:
    """Take a snapshot of the shelf and plan the target on it."""
    wanted = wanted_from_shelf(target)
    snapshot = shelf_snapshot(actor=actor, inchikeys=wanted.inchikeys, substances=wanted.substances)
    shelf = tuple(_for_engine(bottle) for bottle in snapshot)
    plan = make_plan(target, scale, shelf, as_of=as_of)
    return PlannedOn(
        plan, plan_document(plan, as_of=as_of), tuple(bottle.code for bottle in snapshot)
    )


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

__all__ = ["PlannedOn", "Scale", "Target", "plan_on_shelf", "read_target"]
