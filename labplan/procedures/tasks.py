"""What the outbox delivers to this app: a few lines each, calling a service."""

import uuid
from datetime import timedelta

from django.conf import settings

from inventory.services import HOLDS_CANCELLED_TOPIC
from labplan.base import outbox
from labplan.base.housekeeping import sweeps
from labplan.base.outbox.topics import Payload
from labplan.base.warming import warms_up
from labplan.procedures.engine import warm_plan
from labplan.procedures.services import (
    give_up_planning,
    lapse_overdue,
    note_lost_holds,
    plan_procedure,
    requeue_procedure,
)
from labplan.procedures.services.request import PLAN_TOPIC


def _given_up(payload: Payload, reason: str) -> None:
    give_up_planning(procedure_id=payload["procedure_id"], reason=reason)


def _sent_again(payload: Payload) -> None:
    requeue_procedure(procedure_id=payload["procedure_id"])


@outbox.handles(
    PLAN_TOPIC, queue=outbox.PROCEDURES, limit_s=settings.PLAN_LIMIT_S,
    when_given_up=_given_up, when_sent_again=_sent_again,
)  # fmt: skip
def on_plan(payload: Payload, message_id: int) -> None:
    plan_procedure(procedure_id=payload["procedure_id"], message_id=message_id)


@sweeps("procedures.lapse_overdue", every=timedelta(minutes=5))
def lapse_what_is_overdue() -> int:
    return lapse_overdue()


@warms_up
def warm_the_engine() -> None:
    """Read and plan one target on an empty shelf: everything that planning needs is then loaded."""
    warm_plan()


@outbox.handles(HOLDS_CANCELLED_TOPIC, queue=outbox.HOUSEKEEPING)
def on_holds_cancelled(payload: Payload, message_id: int) -> None:
    note_lost_holds(
        reservation_code=uuid.UUID(payload["reservation"]), holds=payload["holds"],
        message_id=message_id,
    )  # fmt: skip
