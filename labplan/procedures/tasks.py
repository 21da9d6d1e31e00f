"""What the outbox delivers to this app: a few lines each, calling a service."""

from typing import Any

from labplan.base import outbox
from labplan.procedures.services import plan_procedure
from labplan.procedures.services.request import PLAN_TOPIC


@outbox.handles(PLAN_TOPIC)
def on_plan(payload: dict[str, Any], message_id: int) -> None:
    plan_procedure(procedure_id=payload["procedure_id"], message_id=message_id)
