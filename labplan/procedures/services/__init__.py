"""What may be done with a procedure."""

from labplan.procedures.services.cancel import cancel_procedure, require_may_cancel
from labplan.procedures.services.giving_up import give_up_planning, requeue_procedure
from labplan.procedures.services.lapse import lapse_overdue
from labplan.procedures.services.lost_holds import note_lost_holds
from labplan.procedures.services.planning import plan_procedure
from labplan.procedures.services.preview import preview_routes
from labplan.procedures.services.request import (
    ProcedureOrder,
    request_procedure,
    require_may_request,
)
from labplan.procedures.services.verify_documents import (
    DocumentFault,
    DocumentsReport,
    verify_documents,
)

__all__ = [
    "DocumentFault",
    "DocumentsReport",
    "ProcedureOrder",
    "cancel_procedure",
    "give_up_planning",
    "lapse_overdue",
    "note_lost_holds",
    "plan_procedure",
    "preview_routes",
    "request_procedure",
    "requeue_procedure",
    "require_may_cancel",
    "require_may_request",
    "verify_documents",
]
