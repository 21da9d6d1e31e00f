"""What may be done with a procedure."""

from labplan.procedures.services.cancel import cancel_procedure, require_may_cancel
from labplan.procedures.services.lost_holds import note_lost_holds
from labplan.procedures.services.planning import plan_procedure
from labplan.procedures.services.preview import preview_routes
from labplan.procedures.services.request import (
    ProcedureOrder,
    request_procedure,
    require_may_request,
)

__all__ = [
    "ProcedureOrder",
    "cancel_procedure",
    "note_lost_holds",
    "plan_procedure",
    "preview_routes",
    "request_procedure",
    "require_may_cancel",
    "require_may_request",
]
