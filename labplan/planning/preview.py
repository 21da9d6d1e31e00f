"""The answer of a preview: every route, amounts as JSON numbers, null where nothing can be said."""

import math
from decimal import Decimal
from typing import Any

from labplan.chemistry.errors import TargetProblem
from labplan.planning.document import coupling_document, expectations_document, route_document
from labplan.planning.plan import Plan
from labplan.planning.values import Route


def preview(plan: Plan) -> dict[str, Any]:
    """What could be made and how, from which bottles; nothing is stored or held."""
    answer: dict[str, Any] = {
        **coupling_document(plan.target),
        "verdict": plan.verdict,
        "reasons": [{"code": r.code, "detail": r.detail} for r in plan.reasons],
        "routes": [{**route_document(route), "score": score_of(route)} for route in plan.routes],
        "expectations": expectations_document(plan.expectations) if plan.expectations else None,
    }
    numbered: dict[str, Any] = _with_numbers(answer)
    return numbered


def preview_of_problem(problem: TargetProblem) -> dict[str, Any]:
    """The same object for a structure that cannot be taken as a target."""
    return {
        "target": None,
        "coupling": None,
        "verdict": "not_plannable",
        "reasons": [{"code": problem.code, "detail": problem.detail}],
        "routes": [],
        "expectations": None,
    }


def score_of(route: Route) -> float | None:
    """The planned yield over all stages, as a fraction; None for a route without its stages."""
    if not route.stages:
        return None
    return round(math.prod(stage.yield_pct[1] / 100 for stage in route.stages), 4)


def _with_numbers(value: Any) -> Any:
    if isinstance(value, Decimal):
        return int(value) if value == value.to_integral_value() else float(value)
    if isinstance(value, dict):
        return {key: _with_numbers(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_with_numbers(item) for item in value]
    return value
