"""Refusals that Django answers before a view runs get the same shape as all others."""

from collections.abc import Callable

from django.http import HttpRequest, HttpResponse

from labplan.base.problems import plain_problem

_HTML_REFUSALS = {
    400: ("malformed_request", "The request could not be read; check the Host header and body."),
    413: ("too_large", "The body is too large."),
}


class ProblemFallbackMiddleware:
    def __init__(self, get_response: Callable[[HttpRequest], HttpResponse]) -> None:
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
