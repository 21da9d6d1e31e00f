"""What the outbox delivers to this app: a few lines each, calling a service."""

import uuid
from typing import Any

from inventory.services import HOLDS_CANCELLED_TOPIC
from labplan.base import outbox
from labplan.procedures.services import note_lost_holds, plan_procedure
from labplan.procedures.services.request import PLAN_TOPIC


@outbox.handles(PLAN_TOPIC)
def on_plan(payload: dict[str, Any], message_id: int) -> None:
    plan_procedure(procedure_id=payload["procedure_id"], message_id=message_id)


@outbox.handles(HOLDS_CANCELLED_TOPIC)
def on_holds_cancelled(payload: dict[str, Any], message_id: int) -> None:
    note_lost_holds(
        reservation_code=uuid.UUID(payload["reservation"]), holds=payload["holds"],
        message_id=message_id,
    )  # fmt: skip
