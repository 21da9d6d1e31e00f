"""Projects, as far as the actor belongs to them."""

from django.db.models import QuerySet

from labplan.base.errors import NotFound
from labplan.base.models import Project
from labplan.base.rights import Actor, visible_project_ids


def list_projects(*, actor: Actor) -> QuerySet[Project]:
    mine = visible_project_ids(actor, "project.view")
    return Project.objects.all() if mine is None else Project.objects.filter(pk__in=mine)


def get_project(*, actor: Actor, code: str) -> Project:
    project = list_projects(actor=actor).filter(code=code).first()
    if project is None:
        raise NotFound(f"There is no project {code} that you belong to.")
    return project
