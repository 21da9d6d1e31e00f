"""What may be asked about procedures."""

from django.db.models import Count, QuerySet

from labplan.base.errors import NotFound
from labplan.base.rights import Actor, visible_project_ids
from labplan.procedures import life
from labplan.procedures.models import Procedure


def list_procedures(*, actor: Actor, project: str = "", state: str = "") -> QuerySet[Procedure]:
    mine = visible_project_ids(actor, "procedure.view")
    found = Procedure.objects.select_related("project", "document")
    if mine is not None:
        found = found.filter(project__in=mine)
    if project:
        found = found.filter(project__code=project)
    return found.filter(state=state) if state else found


def get_procedure(*, actor: Actor, code: str) -> Procedure:
    """One procedure; one of another project is answered like one that is not there."""
    procedure = list_procedures(actor=actor).filter(code=code).first()
    if procedure is None:
        raise NotFound(f"There is no procedure {code}.")
    return procedure


def count_by_state(*, actor: Actor) -> dict[str, int]:
    """How many there are in each state; states in which there is none are left out."""
    found = list_procedures(actor=actor).select_related(None)
    return dict(found.values_list("state").annotate(number=Count("id")).order_by())


def count_queued_before(procedure: Procedure) -> int | None:
    """How many of all projects were asked for earlier and are still queued; None once it is not.

    Whoever sees the procedure is told this number, and nothing else of what is not theirs.
    """
    if procedure.state != life.QUEUED:
        return None
    return Procedure.objects.filter(state=life.QUEUED, pk__lt=procedure.pk).count()
