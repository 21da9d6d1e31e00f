"""One tree of errors, one form on the wire; errors travel between processes unchanged."""

import json
import pickle
from typing import Any

import pytest
from django.core.exceptions import PermissionDenied
from django.db import InterfaceError, OperationalError
from django.http import Http404
from django.test import RequestFactory
from rest_framework import exceptions

from inventory import errors as stock
from labplan.base import errors, problems, tracing
from labplan.base.errors import DomainError, FieldProblem

LINE = FieldProblem("project", "unknown_project", "There is no such project.")


def all_kinds(kind: type[DomainError] = DomainError) -> list[type[DomainError]]:
    """The whole tree as the modules declare it; kinds made on the way are left out."""
    found = [kind] if kind.__module__ in {errors.__name__, stock.__name__} else []
    return found + [below for child in kind.__subclasses__() for below in all_kinds(child)]


# code -> status, by hand: clients rely on both
CODES = {
    "refused": 422,
    "malformed_request": 400,
    "too_large": 413,
    "unknown_field": 400,
    "not_authenticated": 401,
    "login_failed": 401,
    "too_many_attempts": 429,
    "not_allowed": 403,
    "not_found": 404,
    "invalid_value": 422,
    "state_forbids": 409,
    "stale_copy": 412,
    "precondition_missing": 428,
    "idempotency_key_missing": 400,
    "idempotency_key_reused": 422,
    "request_running": 409,
    "busy": 503,
    "database_away": 503,
    "stock_short": 409,
    "quota_exceeded": 422,
    "not_convertible": 422,
    "import_refused": 422,
}


def test_every_kind_has_its_own_code_a_title_and_the_status_of_the_table() -> None:
    assert {kind.code: kind.status for kind in all_kinds()} == CODES
    assert len({kind.code for kind in all_kinds()}) == len(all_kinds())
    assert len({kind.title for kind in all_kinds()}) == len(all_kinds())


@pytest.mark.parametrize("kind", all_kinds(), ids=lambda kind: kind.code)
def test_an_error_survives_pickling(kind: type[DomainError]) -> None:
    if kind is stock.StockShort:
        shortfalls = (stock.Shortfall(line=2, bottle="OCT-1", needed=5, usable=3),)
        made: DomainError = stock.StockShort("Not enough in OCT-1.", shortfalls=shortfalls)
    else:
        made = kind("Say it again.", errors=(LINE,), retry_after=3)
    back = pickle.loads(pickle.dumps(made))
    assert type(back) is kind
    assert str(back) == str(made)
    assert (back.detail, back.errors, back.extra) == (made.detail, made.errors, made.extra)
    assert back.__dict__ == made.__dict__


def test_a_problem_has_the_members_of_the_standard_and_ours() -> None:
    made = errors.InvalidValue("Correct it.", errors=(LINE,), allowed=["LECTIN-07"])
    assert problems.problem_body(made) == {
        "type": "urn:labplan:problem:invalid_value",
        "title": "A value breaks a rule",
        "status": 422,
        "code": "invalid_value",
        "detail": "Correct it.",
        "errors": [
            {
                "field": "project",
                "code": "unknown_project",
                "detail": "There is no such project.",
            }
        ],
        "allowed": ["LECTIN-07"],
    }


class Cause(Exception):
    """A driver's error with its five-letter state."""

    def __init__(self, sqlstate: str) -> None:
        super().__init__(sqlstate)
        self.sqlstate = sqlstate


def caused_by(sqlstate: str) -> OperationalError:
    error = OperationalError("canceling statement due to lock timeout")
    error.__cause__ = Cause(sqlstate)
    return error


@pytest.mark.parametrize(
    ("raised", "status", "code"),
    [
        (errors.StaleCopy("It has changed."), 412, "stale_copy"),
        (Http404(), 404, "not_found"),
        (exceptions.NotAuthenticated(), 401, "not_authenticated"),
        (exceptions.AuthenticationFailed("No."), 401, "not_authenticated"),
        (PermissionDenied(), 403, "not_allowed"),
        (exceptions.PermissionDenied(), 403, "not_allowed"),
        (exceptions.MethodNotAllowed("PUT"), 405, "method_not_allowed"),
        (exceptions.NotAcceptable(), 406, "not_acceptable"),
        (exceptions.UnsupportedMediaType("text/plain"), 415, "unsupported_media_type"),
        (exceptions.Throttled(), 429, "throttled"),
        (caused_by("55P03"), 503, "busy"),
        (caused_by("40P01"), 503, "busy"),
        (caused_by("40001"), 503, "busy"),
        (OperationalError("database is locked"), 503, "busy"),
        (OperationalError("database or disk is full"), 503, "database_away"),
        (caused_by("53300"), 503, "database_away"),  # too many connections
        (InterfaceError("the connection is closed"), 503, "database_away"),
    ],
)
def test_what_the_frameworks_raise_gets_our_form(raised: Exception, status: int, code: str) -> None:
    response = problems.problem_response(raised, {})
    assert response is not None
    assert response.status_code == response.data["status"] == status
    assert response.data["code"] == code
    assert response.content_type == "application/problem+json"
    assert "{" not in response.data["title"] + response.data["detail"]
    assert response.data["title"]
    assert response.data["detail"]


@pytest.mark.parametrize(
    "raised", [ValueError("a secret"), KeyError("x"), OperationalError("no such table: x")]
)
def test_what_nobody_foresaw_is_left_to_the_server_error(raised: Exception) -> None:
    assert problems.problem_response(raised, {}) is None


@pytest.mark.parametrize(
    ("raised", "header", "value"),
    [
        (errors.NotAuthenticated("No token."), "WWW-Authenticate", 'Bearer realm="labplan"'),
        (errors.Busy("Again."), "Retry-After", "1"),
        (errors.StillRunning("Wait."), "Retry-After", "1"),
    ],
)
def test_a_refusal_carries_the_header_that_belongs_to_it(
    raised: DomainError, header: str, value: str
) -> None:
    response = problems.problem_response(raised, {})
    assert response is not None
    assert response[header] == value


def body_of(response: Any) -> dict[str, Any]:
    assert response["Content-Type"] == "application/problem+json"
    found: dict[str, Any] = json.loads(response.content)
    assert set(found) == {"type", "title", "status", "code", "detail", "errors"}
    return found


def test_a_server_error_tells_a_trace_and_nothing_else(caplog: pytest.LogCaptureFixture) -> None:
    request = RequestFactory().get("/api/v1/procedures/")
    body = body_of(problems.server_error(request))
    assert (body["status"], body["code"]) == (500, "internal_error")
    trace_id = body["detail"].rstrip(".").rsplit(" ", 1)[1]
    assert len(trace_id) == 16
    assert trace_id in caplog.text
    assert body_of(problems.server_error(request))["detail"] != body["detail"]


def test_the_trace_of_a_server_error_is_the_id_of_the_request() -> None:
    with tracing.working_on("the-callers-own.id_1"):
        body = body_of(problems.server_error(RequestFactory().get("/api/v1/procedures/")))
    assert body["detail"] == "Something broke here. Tell the operator: the-callers-own.id_1."


def test_an_address_that_is_not_served_is_a_problem() -> None:
    body = body_of(problems.not_found(RequestFactory().get("/nowhere"), Http404()))
    assert body["status"] == 404
    assert body["detail"] == (
        "Nothing is served at /nowhere. The API is described at /api/v1/docs/."
    )
