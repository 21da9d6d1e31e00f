"""`/projects/`: who may use what."""

from typing import Any

from django.db.models import QuerySet
from rest_framework.response import Response

from labplan.base import selectors
from labplan.base.api import schema
from labplan.base.models import Project
from labplan.base.pagination import ByCodePagination
from labplan.base.views import ListView, LookView


def show_project(project: Project) -> dict[str, Any]:
    return {"code": project.code, "title": project.title, "is_open": project.is_open}


@schema.project_list
class ProjectList(ListView):
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Project]:
        return selectors.list_projects(actor=request.user)

    def show(self, row: Project) -> dict[str, Any]:
        return show_project(row)


@schema.project_detail
class ProjectDetail(LookView):
    def get(self, request: Any, code: str) -> Response:
        project = selectors.get_project(actor=request.user, code=code)
        members = project.memberships.select_related("person").order_by("person__code")
        people = [{"person": m.person.code, "role": m.role} for m in members]
        return Response({**show_project(project), "members": people})
