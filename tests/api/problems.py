"""What every refusal on the wire has to look like."""

from typing import Any

TYPE_PREFIX = "urn:labplan:problem:"


def assert_problem(response: Any, status: int, code: str) -> dict[str, Any]:
    """Check form, status and code of a refusal and return its body."""
    assert response.status_code == status, response.content[:500]
    assert response["Content-Type"] == "application/problem+json"
    body: dict[str, Any] = response.json()
    assert (body["type"], body["status"], body["code"]) == (TYPE_PREFIX + code, status, code)
    assert len(body["title"]) > 5
    assert "{" not in body["title"]
    assert len(body["detail"]) > 10
    assert isinstance(body["errors"], list)
    for line in body["errors"]:
        assert set(line) == {"field", "code", "detail"}
        assert line["detail"]
    return body


def error_codes(body: dict[str, Any]) -> list[tuple[str, str]]:
    return [(line["field"], line["code"]) for line in body["errors"]]
