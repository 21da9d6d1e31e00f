"""Which project a movement or a hold is charged to."""

from labplan.base.models import Project
from labplan.base.projects import get_project_for, require_open
from labplan.base.rights import Actor


def require_project(*, actor: Actor, code: str, operation: str) -> Project:
    """The project, if the actor may do this in it and it is open; raises as those two do."""
    project = get_project_for(actor=actor, code=code, operation=operation)
    require_open(project)
    return project
