"""From a stored procedure to what its sheet shows."""

import json
from typing import Any

from labplan.base.models import PersonName
from labplan.procedures.models import Procedure
from labplan.procedures.sheet.model import Heading, scale_text, sheet_view


def view_of(procedure: Procedure) -> dict[str, Any]:
    """The view of the stored document; the document must be there."""
    assert procedure.document is not None
    name = PersonName.objects.filter(person__code=procedure.requested_by).first()
    heading = Heading(
        code=procedure.code,
        state=procedure.state,
        project_code=procedure.project.code,
        project_title=procedure.project.title,
        requested_by=procedure.requested_by,
        requested_by_name=name.full_name if name else "",
        scale=scale_text(procedure.product_mass_mg, procedure.acceptor_amount_mmol),
        sha256=procedure.document.sha256,
        seal=procedure.document.seal,
    )
    return sheet_view(json.loads(bytes(procedure.document.body)), heading)
