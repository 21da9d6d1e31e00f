"""Procedures over HTTP."""

from functools import partial
from typing import Any

from django.db.models import QuerySet
from django.http import HttpResponse
from rest_framework.response import Response
from rest_framework.views import APIView

from labplan.base.errors import NotFound
from labplan.base.fields import StrictSerializer
from labplan.base.idempotency import answer_once, claim_from
from labplan.base.preconditions import require_match
from labplan.base.views import ListView
from labplan.procedures import selectors, services
from labplan.procedures.api import shapes
from labplan.procedures.api.orders import read_order
from labplan.procedures.models import Document, Procedure
from labplan.procedures.sheet import sheet_html


class ProcedureList(ListView):
    filters = {"project", "state"}

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Procedure]:
        return selectors.list_procedures(actor=request.user, **wanted)

    def show(self, row: Procedure) -> dict[str, Any]:
        return shapes.show_summary(row)

    def post(self, request: Any) -> Response:
        order = read_order(request.data)
        claim = claim_from(request, route="procedure.request", render=_accepted)
        return answer_once(
            claim, partial(services.request_procedure, actor=request.user, order=order, once=claim)
        )


def _accepted(procedure: Procedure) -> Response:
    body = shapes.show_summary(procedure)
    headers = {
        "Location": body["links"]["self"], "ETag": shapes.etag(procedure), "Retry-After": "1",
    }  # fmt: skip
    return Response(body, status=202, headers=headers)


class ProcedureDetail(APIView):
    def get(self, request: Any, code: str) -> Response:
        procedure = selectors.get_procedure(actor=request.user, code=code)
        return Response(shapes.show_detail(procedure), headers={"ETag": shapes.etag(procedure)})


class ProcedureDocument(APIView):
    """The canonical bytes as stored; their SHA-256 is the ETag."""

    def get(self, request: Any, code: str) -> HttpResponse:
        document = _document(request, code)
        response = HttpResponse(bytes(document.body), content_type="application/json")
        response["ETag"] = f'"{document.sha256}"'
        return response


class ProcedureSheetHtml(APIView):
    def get(self, request: Any, code: str) -> HttpResponse:
        procedure = selectors.get_procedure(actor=request.user, code=code)
        _document(request, code)
        return HttpResponse(sheet_html(procedure))


def _document(request: Any, code: str) -> Document:
    procedure = selectors.get_procedure(actor=request.user, code=code)
    if procedure.document is None:
        raise NotFound(f"{code} is {procedure.state} and has no document.")
    return procedure.document


class ProcedureCancel(APIView):
    def post(self, request: Any, code: str) -> Response:
        StrictSerializer(data=request.data or {}).read()
        claim = claim_from(request, route="procedure.cancel", render=_shown)
        return answer_once(
            claim,
            partial(
                services.cancel_procedure, actor=request.user, code=code, once=claim,
                check_version=lambda procedure: require_match(request, shapes.etag(procedure)),
            ),
        )  # fmt: skip


def _shown(procedure: Procedure) -> Response:
    return Response(shapes.show_summary(procedure), headers={"ETag": shapes.etag(procedure)})
