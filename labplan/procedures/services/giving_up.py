"""What becomes of a procedure whose outbox message is given up, or sent again by the operator."""

import json

from labplan.base import clock
from labplan.base.events import record_event
from labplan.procedures import life, progress
from labplan.procedures.models import Procedure
from labplan.procedures.services.changes import announce_change, note_settled


def give_up_planning(*, procedure_id: int, reason: str) -> None:
    """Fail a procedure that is still queued, in the caller's transaction; safe to repeat."""
    procedure = _locked(procedure_id)
    if procedure.state != life.QUEUED:
        return
    detail = (
        "Planning failed again and again with an error that is not the request's. The operator "
        "finds it with 'manage.py outbox dead' and can send it again."
    )
    procedure.reasons = json.dumps([{"code": "planning_given_up", "detail": detail}])
    procedure.settled_at = clock.now()
    _move(procedure, "plan", life.FAILED, progress.ENDED, {"reason": reason})
    note_settled(procedure)


def requeue_procedure(*, procedure_id: int) -> None:
    """Let a failed procedure wait for planning again, in the caller's transaction.

    Raises StateForbids when it did not fail.
    """
    procedure = _locked(procedure_id)
    procedure.reasons, procedure.settled_at = "[]", None
    procedure.broken_off = 0
    _move(procedure, "requeue", life.QUEUED, progress.WAITING, {})


def _locked(procedure_id: int) -> Procedure:
    return Procedure.objects.select_for_update(no_key=True, of=("self",)).get(pk=procedure_id)


def _move(procedure: Procedure, action: str, end: str, phase: str, detail: dict[str, str]) -> None:
    before = procedure.state
    procedure.state = life.require_end(before, action, end)
    procedure.phase = phase
    procedure.version += 1
    procedure.save()
    record_event(
        actor_code="OPERATOR" if action == "requeue" else procedure.requested_by,
        kind=f"procedure.{end}", subject=f"procedure {procedure.code}",
        before=before, after={"state": end, **detail},
    )  # fmt: skip
    announce_change(procedure)
