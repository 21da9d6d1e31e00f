"""What may be done with a procedure."""

from labplan.procedures.services.cancel import cancel_procedure
from labplan.procedures.services.planning import plan_procedure
from labplan.procedures.services.request import ProcedureOrder, request_procedure

__all__ = ["ProcedureOrder", "cancel_procedure", "plan_procedure", "request_procedure"]
