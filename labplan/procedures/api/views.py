"""Procedures over HTTP."""

import hashlib
from functools import partial
from typing import Any

from django.db.models import QuerySet
from django.http import HttpResponse
from rest_framework.response import Response

from labplan.base.errors import FieldProblem, InvalidValue, NotFound
from labplan.base.fields import StrictSerializer
from labplan.base.idempotency import answer_once, claim_from
from labplan.base.preconditions import is_known, require_match
from labplan.base.views import ListView, LookView
from labplan.procedures import life, selectors, services
from labplan.procedures.api import schema, shapes
from labplan.procedures.api.orders import read_order, read_preview
from labplan.procedures.models import Document, Procedure
from labplan.procedures.sheet.html import sheet_html
from labplan.procedures.sheet.of_procedure import view_of
from labplan.procedures.sheet.pdf import PAPERS, sheet_pdf

LOOK_AGAIN_S = "1"  # for those who do not wait


@schema.route_preview
class RoutePreview(LookView):
    """Moves nothing, so that it needs neither a key nor a token of scope write."""

    def post(self, request: Any) -> Response:
        return Response(services.preview_routes(actor=request.user, **read_preview(request.data)))


@schema.procedure_list
class ProcedureList(ListView):
    filters = {"project", "state"}
    choices = {"state": life.STATES}

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Procedure]:
        return selectors.list_procedures(actor=request.user, **wanted)

    def show(self, row: Procedure) -> dict[str, Any]:
        return shapes.show_summary(row)

    def post(self, request: Any) -> Response:
        order = read_order(request.data)
        claim = claim_from(request, route="procedure.request", render=_accepted)
        return answer_once(
            claim,
            check_rights=partial(
                services.require_may_request, actor=request.user, project_code=order.project_code
            ),
            work=partial(
                services.request_procedure, actor=request.user, order=order, once=claim
            ),
        )  # fmt: skip


def _accepted(procedure: Procedure) -> Response:
    body = shapes.show_summary(procedure)
    headers = {
        "Location": body["links"]["self"], "ETag": shapes.etag(procedure),
        "Retry-After": LOOK_AGAIN_S,
    }  # fmt: skip
    return Response(body, status=202, headers=headers)


@schema.procedure_detail
class ProcedureDetail(LookView):
    """Retry-After says that it is not settled yet; the waiting service goes by that header."""

    def get(self, request: Any, code: str) -> Response:
        procedure = selectors.get_procedure(actor=request.user, code=code)
        before = selectors.count_queued_before(procedure)
        headers = {"ETag": shapes.detail_etag(procedure, before), "Vary": "Prefer"}
        if before is not None:
            headers["Retry-After"] = LOOK_AGAIN_S
        if is_known(request, headers["ETag"]):
            return Response(status=304, headers=headers)
        return Response(shapes.show_detail(procedure, before), headers=headers)


@schema.procedure_document
class ProcedureDocument(LookView):
    """The canonical bytes as stored; their SHA-256 is the ETag."""

    def get(self, request: Any, code: str) -> HttpResponse:
        document = _document(request, code)
        etag = f'"{document.sha256}"'
        if is_known(request, etag):
            return HttpResponse(status=304, headers={"ETag": etag})
        return HttpResponse(
            bytes(document.body), content_type="application/json", headers={"ETag": etag}
        )


@schema.procedure_sheet_html
class ProcedureSheetHtml(LookView):
    def perform_content_negotiation(self, request: Any, force: bool = False) -> Any:
        """The sheet is HTML and its refusals are problems, whatever Accept asks for."""
        return super().perform_content_negotiation(request, force=True)

    def get(self, request: Any, code: str) -> HttpResponse:
        procedure = selectors.get_procedure(actor=request.user, code=code)
        _document(request, code)
        return HttpResponse(sheet_html(view_of(procedure)))


@schema.procedure_sheet_pdf
class ProcedureSheetPdf(LookView):
    """The sheet for a printer. The same state, document and paper give the same bytes."""

    parameters = {"paper"}

    def perform_content_negotiation(self, request: Any, force: bool = False) -> Any:
        """The sheet is a PDF and its refusals are problems, whatever Accept asks for."""
        return super().perform_content_negotiation(request, force=True)

    def get(self, request: Any, code: str) -> HttpResponse:
        paper = _paper(request)
        _document(request, code)
        pdf = sheet_pdf(view_of(selectors.get_procedure(actor=request.user, code=code)), paper)
        etag = f'"{hashlib.sha256(pdf).hexdigest()}"'
        if is_known(request, etag):
            return HttpResponse(status=304, headers={"ETag": etag})
        headers = {"ETag": etag, "Content-Disposition": f'inline; filename="{code}-{paper}.pdf"'}
        return HttpResponse(pdf, content_type="application/pdf", headers=headers)


def _paper(request: Any) -> str:
    paper: str = request.query_params.get("paper", "a4")
    if paper not in PAPERS:
        detail = f"Give one of: {', '.join(sorted(PAPERS))}."
        raise InvalidValue(detail, errors=(FieldProblem("paper", "unknown_paper", detail),))
    return paper


def _document(request: Any, code: str) -> Document:
    procedure = selectors.get_procedure(actor=request.user, code=code)
    if procedure.document is None:
        raise NotFound(f"{code} is {procedure.state} and has no document.")
    return procedure.document


@schema.procedure_cancel
class ProcedureCancel(LookView):
    def post(self, request: Any, code: str) -> Response:
        StrictSerializer(data=request.data).read()
        claim = claim_from(request, route="procedure.cancel", render=_shown)
        return answer_once(
            claim,
            check_rights=partial(services.require_may_cancel, actor=request.user, code=code),
            work=partial(
                services.cancel_procedure, actor=request.user, code=code, once=claim,
                check_version=lambda procedure: require_match(request, shapes.etag(procedure)),
            ),
        )  # fmt: skip


def _shown(procedure: Procedure) -> Response:
    return Response(shapes.show_summary(procedure), headers={"ETag": shapes.etag(procedure)})
