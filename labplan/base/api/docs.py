"""`/openapi.json` and `/docs/`: this API for programs and for people, without a token."""

from functools import cache
from typing import Any

from django.http import HttpResponse, JsonResponse
from django.template.loader import render_to_string
from drf_spectacular.generators import SchemaGenerator
from rest_framework.views import APIView

from labplan.base.api import schema
from labplan.base.api.pages import page_of_schema


@cache
def openapi() -> dict[str, Any]:
    """The description of this API; made once a process, since only the code changes it."""
    made: dict[str, Any] = SchemaGenerator().get_schema(public=True)
    return made


@cache
def documentation() -> str:
    return render_to_string("base/api.html", page_of_schema(openapi()))


class OpenView(APIView):
    """Holds no data of the laboratory, so it is for everybody."""

    authentication_classes = ()
    permission_classes = ()

    def perform_content_negotiation(self, request: Any, force: bool = False) -> Any:
        return super().perform_content_negotiation(request, force=True)


@schema.openapi_document
class OpenApiDocument(OpenView):
    def get(self, request: Any) -> JsonResponse:
        return JsonResponse(openapi(), json_dumps_params={"ensure_ascii": False})


@schema.documentation_page
class DocumentationPage(OpenView):
    def get(self, request: Any) -> HttpResponse:
        return HttpResponse(documentation())
