"""Which project a movement or a hold is charged to."""

from labplan.base.errors import FieldProblem, InvalidValue, NotAllowed
from labplan.base.models import Project
from labplan.base.rights import Actor, may, require


def require_project(*, actor: Actor, code: str, operation: str) -> Project:
    """The project, if the actor may do this in it and it is open.

    Raises InvalidValue for a project that the actor may not see, as for one that is not there,
    and NotAllowed.
    """
    project = Project.objects.filter(code=code).first()
    if project is None or not may(actor, "project.view", project_id=project.pk):
        detail = f"There is no project {code!r} that you belong to."
        raise InvalidValue(detail, errors=(FieldProblem("project", "unknown_project", detail),))
    require(actor, operation, project_id=project.pk)
    if not project.is_open:
        raise NotAllowed(f"The project {project.code} is closed; nothing is charged to it.")
    return project
