"""The sheet one takes to the hood, from the stored document."""

import json
from typing import Any

from django.template.loader import render_to_string

from labplan.base.models import PersonName
from labplan.procedures.models import Procedure

GROUPS = (
    ("reaction", "Into the flask"),
    ("work-up", "For the work-up"),
    ("purification", "For the purification"),
)


def sheet_html(procedure: Procedure) -> str:
    """Render the stored document; the document must be there."""
    assert procedure.document is not None
    document = json.loads(bytes(procedure.document.body))
    return render_to_string("procedures/sheet.html", _context(procedure, document))


def _context(procedure: Procedure, document: dict[str, Any]) -> dict[str, Any]:
    route = document["route"]
    name = PersonName.objects.filter(person__code=procedure.requested_by).first()
    return {
        "procedure": procedure,
        "requested_by_name": name.full_name if name else "",
        "sha256": procedure.document.sha256 if procedure.document else "",
        "document": document,
        "route": route,
        "stages": [_stage_context(stage) for stage in route["stages"]] if route else [],
    }


def _stage_context(stage: dict[str, Any]) -> dict[str, Any]:
    charges = stage["charges"]
    groups = [
        {"title": title, "charges": [c for c in charges if c["group"] == group]}
        for group, title in GROUPS
    ]
    by_key = {charge["key"]: charge for charge in charges}
    steps = [{**step, "boxes": [by_key[key] for key in step["charges"]]} for step in stage["steps"]]
    water = [{**line, "name": by_key[line["charge"]]["name"]} for line in stage["water"]["lines"]]
    return {**stage, "groups": [g for g in groups if g["charges"]], "steps": steps,
            "water_lines": water}  # fmt: skip
