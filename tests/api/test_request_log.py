"""Every answer has its id and its line in the log, and the line has no secrets."""

import re
from collections.abc import Iterator
from typing import Any

import pytest
from django.test import Client

from labplan.base import tracing
from labplan.procedures import selectors
from tests.api.problems import assert_problem
from tests.json_log import Lines, json_log
from tests.laboratory import PROCEDURES, ApiTestClient, Laboratory, octyl_order


@pytest.fixture
def log() -> Iterator[Lines]:
    with json_log() as lines:
        yield lines


def answered(lines: list[dict[str, Any]]) -> list[dict[str, Any]]:
    return [line for line in lines if line["logger"] == "labplan.requests"]


@pytest.mark.parametrize(
    "given", ["a", "0a6f0f6e-7a52-4a8e-9d0c-0d0f6b7f4c11", "A.b_c-9", "x" * 64]
)
def test_the_callers_id_is_answered(given: str, lab: Laboratory, log: Lines) -> None:
    response = lab.client().get(PROCEDURES, X_Request_ID=given)
    assert response["X-Request-ID"] == given
    assert [line["request_id"] for line in answered(log())] == [given]
    assert tracing.current() == ""


@pytest.mark.parametrize("given", ["", "x" * 65, "two words", "a\tb", "ä", "a;b", 'a"b', "lpt/x"])
def test_an_unfit_id_is_replaced(given: str, lab: Laboratory, log: Lines) -> None:
    response = lab.client().get(PROCEDURES, X_Request_ID=given)
    assert re.fullmatch(r"[0-9a-f]{16}", response["X-Request-ID"])
    assert [line["request_id"] for line in answered(log())] == [response["X-Request-ID"]]


def test_without_one_each_request_gets_its_own(lab: Laboratory) -> None:
    client = lab.client()
    assert len({client.get(PROCEDURES)["X-Request-ID"] for _ in range(5)}) == 5


def test_every_kind_of_answer_has_the_id_and_one_line(lab: Laboratory, log: Lines) -> None:
    client, nobody = lab.client(), ApiTestClient(None)
    sent = {"X_Request_ID": "the-id"}
    kinds = [
        (client.get(PROCEDURES, **sent), 200, "procedure-list", "MIRA"),
        (nobody.get(PROCEDURES, **sent), 401, "procedure-list", None),
        (client.get("/api/v1/nowhere/", **sent), 404, "unmatched", None),
        (client.get(PROCEDURES + "P-22222222/", **sent), 404, "procedure-detail", "MIRA"),
        (client.get(PROCEDURES + "%00/", **sent), 400, "unmatched", None),
        (client.get(PROCEDURES + "?no_such=1", **sent), 400, "procedure-list", "MIRA"),
        (client.post(PROCEDURES, octyl_order(colour=1), **sent), 400, "procedure-list", "MIRA"),
        (client.post(PROCEDURES, octyl_order(), **sent), 202, "procedure-list", "MIRA"),
        (client._client.delete(PROCEDURES, headers={**client._headers, "X-Request-ID": "the-id"}),
         405, "procedure-list", "MIRA"),
    ]  # fmt: skip
    lines = log()
    assert len(lines) == len(kinds)
    for line, (response, status, route, actor) in zip(lines, kinds, strict=True):
        assert (response.status_code, response["X-Request-ID"]) == (status, "the-id")
        assert set(line) == {
            "time", "level", "logger", "message", "request_id", "method", "path", "route",
            "status", "duration_ms", "actor",
        }  # fmt: skip
        assert (line["status"], line["route"], line["actor"]) == (status, route, actor)
        assert (line["request_id"], line["level"]) == ("the-id", "INFO")
        assert line["path"] == response.request["PATH_INFO"]
        assert line["method"] == response.request["REQUEST_METHOD"]
        assert line["duration_ms"] >= 0


def test_a_server_error_is_found_by_the_id_it_tells(
    lab: Laboratory, log: Lines, monkeypatch: pytest.MonkeyPatch
) -> None:
    def breaks(**_: Any) -> None:
        raise ValueError("nobody foresaw this")

    monkeypatch.setattr(selectors, "list_procedures", breaks)
    client = Client(raise_request_exception=False)
    response = client.get(PROCEDURES, headers={**lab.client()._headers, "X-Request-ID": "my-500"})
    body = assert_problem(response, 500, "internal_error")
    assert response["X-Request-ID"] == "my-500"
    assert body["detail"] == "Something broke here. Tell the operator: my-500."
    lines = log()
    assert {line["request_id"] for line in lines} == {"my-500"}
    [line] = answered(lines)
    assert (line["status"], line["level"], line["actor"]) == (500, "WARNING", "MIRA")
    [trace] = [line["exception"] for line in lines if "exception" in line]
    assert trace.endswith("ValueError: nobody foresaw this")


def test_no_query_no_header_and_no_token_is_logged(lab: Laboratory, log: Lines) -> None:
    client = lab.client()
    token = client._headers["Authorization"].split()[1]
    client.get(f"{PROCEDURES}?state=planned&token={token}", Cookie="sessionid=crumb")
    client.get(f"/api/v1/{token}/")
    assert client.get(PROCEDURES, X_Request_ID=token)["X-Request-ID"] != token
    ApiTestClient(token + "x").get(PROCEDURES)
    text = str(log())
    assert len(answered(log())) == 4
    for secret in (token, token[4:], "state=planned", "crumb", "Bearer"):
        assert secret not in text


def test_what_watchers_ask_every_few_seconds_is_logged_only_on_demand(lab: Laboratory) -> None:
    asked = ("/health/live/", "/health/ready/", "/metrics", "/api/v1/health/live/")
    with json_log() as lines:
        for path in asked:
            assert ApiTestClient(None).get(path).status_code == 200
        assert lines() == []
    with json_log(level=10) as lines:
        for path in asked:
            ApiTestClient(None).get(path)
        assert [line["path"] for line in answered(lines())] == list(asked)
        assert {line["level"] for line in answered(lines())} == {"DEBUG"}
    with json_log() as lines:
        ApiTestClient(None).post("/health/live/")
        assert [line["status"] for line in answered(lines())] == [405]
