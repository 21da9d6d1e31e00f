"""Give back what nobody approved in time."""

import uuid

from django.db import transaction

from inventory.selectors import overdue_codes
from inventory.services import lapse_reservation
from labplan.base import clock
from labplan.base.events import record_event
from labplan.base.rights import LABPLAN
from labplan.procedures import life
from labplan.procedures.models import Procedure
from labplan.procedures.services.changes import announce_change


def lapse_overdue() -> int:
    """Let every overdue reservation lapse, with the planned procedure it belongs to.

    Each in a transaction of its own, so that a sweep that is cut short, doubled or missed is made
    good by the next. What is approved or running keeps its holds. Returns how many lapsed.
    """
    return sum(_lapse(code) for code in overdue_codes(today=clock.today()))


def _lapse(reservation_code: uuid.UUID) -> bool:
    with transaction.atomic(durable=True):
        procedure = (
            Procedure.objects.select_for_update(no_key=True)
            .filter(reservation_code=reservation_code)
            .first()
        )
        if procedure is None:
            return lapse_reservation(code=reservation_code, reason="not used in time")
        if procedure.state != life.PLANNED:
            return False
        reason = f"{procedure.code} not approved in time"
        if not lapse_reservation(code=reservation_code, reason=reason):
            return False
        _end(procedure)
    return True


def _end(procedure: Procedure) -> None:
    before = procedure.state
    procedure.state = life.require_end(before, "lapse", life.LAPSED)
    procedure.version += 1
    procedure.save(update_fields=["state", "version"])
    record_event(
        actor_code=LABPLAN.code, kind="procedure.lapsed", subject=f"procedure {procedure.code}",
        before=before, after=procedure.state,
    )  # fmt: skip
    announce_change(procedure)
