"""Cancel a procedure and give back what it holds."""

from collections.abc import Callable

from django.db import transaction

from inventory.services import release_reservation
from labplan.base.errors import NotFound
from labplan.base.events import record_event
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.rights import Actor, may, require
from labplan.procedures import life, progress
from labplan.procedures.models import Procedure
from labplan.procedures.services.changes import announce_change


def cancel_procedure(
    *, actor: Actor, code: str, check_version: Callable[[Procedure], None],
    once: Once | None = None,
) -> Procedure:  # fmt: skip
    """End a queued, planned or approved procedure; its holds go back in the same transaction.

    `check_version` looks at the locked row and raises when the caller's copy is stale. Raises
    NotFound, NotAllowed, StateForbids. Safe to repeat with the same claim.
    """
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        found = (
            Procedure.objects.select_for_update(no_key=True, of=("self",))
            .select_related("project", "document")
            .filter(code=code)
            .first()
        )
        procedure = _require_right(actor, found, code)
        check_version(procedure)
        before = procedure.state
        life.require_action(before, "cancel")
        if procedure.reservation_code is not None:
            # A fact may have taken all of it, and somebody may have given it back by hand.
            release_reservation(
                actor=actor, code=procedure.reservation_code, reason=f"{code} cancelled",
                must_be_open=False,
            )  # fmt: skip
        procedure.state = life.require_end(before, "cancel", life.CANCELLED)
        procedure.version += 1
        procedure.phase = progress.ENDED
        procedure.save(update_fields=["state", "version", "phase"])
        record_event(
            actor_code=actor.code, kind="procedure.cancelled", subject=f"procedure {code}",
            before=before, after=procedure.state,
        )  # fmt: skip
        claim.remember(procedure)
        announce_change(procedure)
    return procedure


def require_may_cancel(*, actor: Actor, code: str) -> None:
    """Raise NotFound or NotAllowed like a first request; says nothing about state or version."""
    _require_right(actor, Procedure.objects.filter(code=code).first(), code)


def _require_right(actor: Actor, procedure: Procedure | None, code: str) -> Procedure:
    if procedure is None or not may(actor, "procedure.view", project_id=procedure.project_id):
        raise NotFound(f"There is no procedure {code}.")
    require(actor, "procedure.cancel", project_id=procedure.project_id)
    return procedure
