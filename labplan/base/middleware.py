"""Around every request: its id, its log line, its count; and one shape for all refusals."""

import logging
import time
from collections.abc import Callable

from django.conf import settings
from django.http import HttpRequest, HttpResponse

from labplan.base import metrics, tracing
from labplan.base.problems import plain_problem
from labplan.base.rights import Actor

logger = logging.getLogger("labplan.requests")
Respond = Callable[[HttpRequest], HttpResponse]

_HTML_REFUSALS = {
    400: ("malformed_request", "The request could not be read; check the Host header and body."),
    413: ("too_large", "The body is too large."),
}


class RequestMiddleware:
    """Give the request an id, answer with it, and log and count the answer, once."""

    def __init__(self, get_response: Respond) -> None:
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        started = time.monotonic()
        with tracing.working_on(tracing.id_from(request.headers.get("X-Request-ID"))):
            response = self.get_response(request)
            response["X-Request-ID"] = tracing.current()
            _note_answer(request, response, time.monotonic() - started)
        return response


def _note_answer(request: HttpRequest, response: HttpResponse, duration_s: float) -> None:
    """The path only: a query may hold anything, and headers hold tokens."""
    route = route_of(request)
    metrics.count_request(route, request.method or "", response.status_code, duration_s)
    is_routine = route in settings.WATCHERS_ROUTES and response.status_code < 400
    actor = getattr(request, "user", None)
    level = logging.WARNING if response.status_code >= 500 else logging.INFO
    logger.log(
        logging.DEBUG if is_routine else level,
        "%s %s -> %s in %.0f ms",
        request.method, request.path, response.status_code, duration_s * 1000,
        extra={
            "method": request.method,
            "path": request.path,
            "route": route,
            "status": response.status_code,
            "duration_ms": round(duration_s * 1000, 1),
            "actor": actor.code if isinstance(actor, Actor) else None,
        },
    )  # fmt: skip


def route_of(request: HttpRequest) -> str:
    """The name of the route in the URL map: unlike the path it names nothing of the laboratory."""
    match = request.resolver_match
    return match.view_name if match else "unmatched"


class ProblemFallbackMiddleware:
    """Refusals that Django answers before a view runs get the same shape as all others."""

    def __init__(self, get_response: Respond) -> None:
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        # PostgreSQL takes no NUL in a text, and no address or filter here has one.
        if "\0" in request.path or "%00" in request.META.get("QUERY_STRING", ""):
            return plain_problem(400, "malformed_request", "Take the NUL character out (%00).")
        response = self.get_response(request)
        is_html = response.get("Content-Type", "").startswith("text/html")
        if response.status_code in _HTML_REFUSALS and is_html:
            return plain_problem(response.status_code, *_HTML_REFUSALS[response.status_code])
        return response
