"""A fact has overtaken what a procedure holds: say so on the procedure."""

import json
import uuid
from typing import Any

from django.db import transaction

from labplan.base import outbox
from labplan.base.events import record_event
from labplan.procedures import life
from labplan.procedures.models import Procedure
from labplan.procedures.services.changes import announce_change

# Before the flask is charged it matters what is held; afterwards the actuals count.
_HOLDING = (life.PLANNED, life.APPROVED, life.RUNNING)


def note_lost_holds(
    *, reservation_code: uuid.UUID, holds: list[dict[str, Any]], message_id: int
) -> None:
    """Add the holds that the stock has cancelled to what is shown of their procedure.

    Its state stays: it is for a person to cancel it, or to set other material aside. Nothing
    happens for a reservation that is no procedure's. Safe to repeat: what is noted already is not
    noted again.
    """
    with transaction.atomic(durable=True):
        rows = Procedure.objects.select_for_update(no_key=True, of=("self",))
        procedure = rows.filter(reservation_code=reservation_code, state__in=_HOLDING).first()
        if procedure is not None:
            _add(procedure, holds)
        outbox.mark_done(message_id)


def _add(procedure: Procedure, holds: list[dict[str, Any]]) -> None:
    noted = json.loads(procedure.lost_holds)
    new = [hold for hold in holds if hold not in noted]
    if not new:
        return
    procedure.lost_holds = json.dumps(noted + new)
    procedure.version += 1
    procedure.save(update_fields=["lost_holds", "version"])
    record_event(
        actor_code=procedure.requested_by, kind="procedure.holds_lost",
        subject=f"procedure {procedure.code}", after=new,
    )  # fmt: skip
    announce_change(procedure)
