"""Every refusal on the wire is application/problem+json (RFC 9457)."""

import logging
from typing import Any

from django.core.exceptions import PermissionDenied
from django.db import InterfaceError, OperationalError
from django.http import Http404, HttpRequest, JsonResponse
from rest_framework import exceptions
from rest_framework.response import Response
from rest_framework.views import set_rollback

from labplan.base import errors as domain
from labplan.base import tracing
from labplan.base.problem_form import CONTENT_TYPE, TYPE_PREFIX, problem_body

logger = logging.getLogger(__name__)


def problem_response(exception: Exception, context: dict[str, Any]) -> Response | None:
    """DRF's exception handler. None (a 500) only for what nobody foresaw."""
    error = as_domain_error(exception)
    if error is None:
        return None
    set_rollback()
    headers = {}
    if error.status == 401:
        headers["WWW-Authenticate"] = 'Bearer realm="labplan"'
    if isinstance(error, domain.StillRunning | domain.Busy | domain.DatabaseAway):
        headers["Retry-After"] = "1"
    if "retry_after_s" in error.extra:
        headers["Retry-After"] = str(error.extra["retry_after_s"])
    if allowed := getattr(context.get("view"), "allowed_methods", None):
        headers["Allow"] = ", ".join(allowed)
    return Response(
        problem_body(error), status=error.status, headers=headers, content_type=CONTENT_TYPE
    )


def as_domain_error(exception: Exception) -> domain.DomainError | None:
    """Translate what the frameworks raise into the one tree of errors."""
    match exception:
        case domain.DomainError():
            return exception
        case Http404():
            return domain.NotFound("Check the address; the code may be mistyped.")
        case exceptions.NotAuthenticated():
            return domain.NotAuthenticated("Send a token as 'Authorization: Bearer <token>'.")
        case exceptions.AuthenticationFailed():
            return domain.NotAuthenticated(str(exception.detail))
        case PermissionDenied() | exceptions.PermissionDenied():
            return domain.NotAllowed("Your token does not allow this.")
        case exceptions.APIException():
            return _from_framework(exception)
        case OperationalError() if is_lock_timeout(exception):
            return domain.Busy("Somebody else is moving the same bottles; send it again.")
        case OperationalError() | InterfaceError() if not has_no_tables(exception):
            logger.error("the database failed: %s: %s", type(exception).__name__, exception)
            return domain.DatabaseAway(
                "The database does not answer, or cannot write. Nothing was changed; send it again "
                "later. /health/ready/ tells the operator what is wrong."
            )
    return None


def has_no_tables(error: Exception) -> bool:
    """Whether the database refused because `migrate` has never run there."""
    return "no such table" in str(error) or getattr(error.__cause__, "sqlstate", "") == "42P01"


def is_lock_timeout(error: OperationalError) -> bool:
    """Whether the database gave up waiting: 55P03, 40P01, 40001, or SQLite's busy."""
    state = getattr(error.__cause__, "sqlstate", None)
    return state in {"55P03", "40P01", "40001"} or "database is locked" in str(error)


# code of the framework -> title, what to do
_FRAMEWORK_TEXTS = {
    "method_not_allowed": ("This method is not served here", "The header Allow lists what is."),
    "unsupported_media_type": (
        "This kind of body is not read here", "Send JSON with Content-Type: application/json."
    ),
    "not_acceptable": (
        "This kind of answer is not given here", "Send Accept: application/json or leave it out."
    ),
}  # fmt: skip


def _from_framework(error: exceptions.APIException) -> domain.DomainError:
    """Give a framework's own refusal our shape, keeping its status and text."""
    code = str(error.default_code)
    title, advice = _FRAMEWORK_TEXTS.get(code, (code.replace("_", " "), ""))
    kind = type(
        "FrameworkRefusal",
        (domain.DomainError,),
        {"code": code, "title": title, "status": error.status_code},
    )
    made: domain.DomainError = kind(f"{error.detail} {advice}".strip())
    return made


def server_error(request: HttpRequest) -> JsonResponse:
    """A 500: no detail leaves the house, but the request's id, under which the log says more."""
    trace_id = tracing.current() or tracing.new_id()
    logger.error("unforeseen error %s at %s %s", trace_id, request.method, request.path)
    return plain_problem(
        500, "internal_error", f"Something broke here. Tell the operator: {trace_id}."
    )


def not_found(request: HttpRequest, exception: Exception) -> JsonResponse:
    detail = f"Nothing is served at {request.path}. The API is described at /api/v1/docs/."
    return plain_problem(404, "not_found", detail)


_TITLES = {
    kind.code: kind.title
    for kind in (domain.NotFound, domain.MalformedRequest, domain.BodyTooLarge)
}


def plain_problem(status: int, code: str, detail: str) -> JsonResponse:
    """A problem outside the API's views, where no serializer is at hand."""
    body = {
        "type": TYPE_PREFIX + code,
        "title": _TITLES.get(code, code.replace("_", " ")),
        "status": status,
        "code": code,
        "detail": detail,
        "errors": [],
    }
    return JsonResponse(body, status=status, content_type=CONTENT_TYPE)
