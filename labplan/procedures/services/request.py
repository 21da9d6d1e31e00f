"""Ask for a procedure: one transaction with the row, the outbox message and the claim."""

import secrets
from dataclasses import dataclass
from decimal import Decimal

from django.db import transaction

from labplan.base import clock, outbox
from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.events import record_event
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.models import Project
from labplan.base.projects import get_project_for, require_open
from labplan.base.rights import Actor
from labplan.chemistry.errors import TargetProblem
from labplan.procedures import life
from labplan.procedures.engine import Target, read_target
from labplan.procedures.models import Procedure

PLAN_TOPIC = "procedure.plan"
# No vowels and nothing that looks like a digit: codes are read aloud at the hood.
_ALPHABET = "23456789BCDFGHJKMNPQRTVWXY"


@dataclass(frozen=True)
class ProcedureOrder:
    """What is wanted: a target and exactly one scale, for a project."""

    project_code: str
    target_smiles: str
    product_mass_mg: Decimal | None = None
    acceptor_amount_mmol: Decimal | None = None
    promoter: str = ""
    solvent: str = ""


def request_procedure(
    *, actor: Actor, order: ProcedureOrder, once: Once | None = None
) -> Procedure:
    """Queue a procedure to be planned.

    Raises InvalidValue (a structure that is no defined glycoside, an unknown project),
    NotAllowed; then nothing is stored. Safe to repeat with the same claim.
    """
    project = require_may_request(actor=actor, project_code=order.project_code)
    require_open(project)
    read_wanted_target(order.target_smiles)
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        procedure = Procedure.objects.create(
            code="P-" + "".join(secrets.choice(_ALPHABET) for _ in range(8)),
            project=project, requested_by=actor.code, target_smiles=order.target_smiles.strip(),
            product_mass_mg=order.product_mass_mg,
            acceptor_amount_mmol=order.acceptor_amount_mmol,
            promoter=order.promoter,
            solvent=order.solvent,
            state=life.QUEUED, created_at=clock.now(),
        )  # fmt: skip
        outbox.enqueue(PLAN_TOPIC, {"procedure_id": procedure.pk})
        record_event(
            actor_code=actor.code, kind="procedure.requested",
            subject=f"procedure {procedure.code}", after={"state": life.QUEUED},
        )  # fmt: skip
        claim.remember(procedure)
    return procedure


def require_may_request(*, actor: Actor, project_code: str) -> Project:
    """The project asked for, if the actor may request procedures in it; raises as the rule does.

    A closed one too: what was answered before it was closed is answered again.
    """
    return get_project_for(actor=actor, code=project_code, operation="procedure.request")


def read_wanted_target(smiles: str) -> Target:
    """Read a structure that somebody typed; InvalidValue says what is wrong with it."""
    try:
        return read_target(smiles)
    except TargetProblem as problem:
        raise InvalidValue(
            problem.detail, errors=(FieldProblem("target_smiles", problem.code, problem.detail),)
        ) from problem
