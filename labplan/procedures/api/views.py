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
from labplan.base.preconditions import is_known, require_match
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
        headers = {"ETag": shapes.etag(procedure)}
        if is_known(request, headers["ETag"]):
            return Response(status=304, headers=headers)
        return Response(shapes.show_detail(procedure), headers=headers)


class ProcedureDocument(APIView):
    """The canonical bytes as stored; their SHA-256 is the ETag."""

    def get(self, request: Any, code: str) -> HttpResponse:
        document = _document(request, code)
        etag = f'"{document.sha256}"'
        if is_known(request, etag):
            return HttpResponse(status=304, headers={"ETag": etag})
        return HttpResponse(
            bytes(document.body), content_type="application/json", headers={"ETag": etag}
        )


class ProcedureSheetHtml(APIView):
    def perform_content_negotiation(self, request: Any, force: bool = False) -> Any:
        """The sheet is HTML and its refusals are problems, whatever Accept asks for."""
        return super().perform_content_negotiation(request, force=True)

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
        StrictSerializer(data=request.data).read()
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
