"""Which project something is charged to."""

from labplan.base.errors import FieldProblem, InvalidValue, NotAllowed
from labplan.base.models import Project
from labplan.base.rights import Actor, may, require


def get_project_for(*, actor: Actor, code: str, operation: str) -> Project:
    """The project that a body names, if the actor may do this in it.

    Raises InvalidValue for a project that the actor may not see, as for one that is not there,
    and NotAllowed.
    """
    project = Project.objects.filter(code=code).first()
    if project is None or not may(actor, "project.view", project_id=project.pk):
        raise InvalidValue(
            "Correct the fields listed in errors.",
            errors=(
                FieldProblem(
                    "project", "unknown_project",
                    f"There is no project {code!r} that you belong to.",
                ),
            ),
        )  # fmt: skip
    require(actor, operation, project_id=project.pk)
    return project


def require_open(project: Project) -> None:
    """Raise NotAllowed for a project that is closed."""
    if not project.is_open:
        raise NotAllowed(f"The project {project.code} is closed; nothing is charged to it.")
