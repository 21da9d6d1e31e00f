"""Hold real answers against the description of the API."""

import copy
from collections.abc import Iterator
from typing import Any

from jsonschema import Draft202012Validator, FormatChecker, ValidationError

# what Django, HTTP and our middleware set on every answer
GENERAL_HEADERS = {
    "Allow", "Content-Length", "Content-Type", "Cross-Origin-Opener-Policy", "Referrer-Policy",
    "Vary", "WWW-Authenticate", "X-Content-Type-Options", "X-Request-ID",
}  # fmt: skip


def closed(schema: Any) -> Any:
    """The same schema, in which no object may have a property that is not described."""
    if isinstance(schema, list):
        return [closed(item) for item in schema]
    if not isinstance(schema, dict):
        return schema
    made = {key: closed(value) for key, value in schema.items()}
    if schema.get("type") in ("object", ["object", "null"]) and "properties" in schema:
        made.setdefault("additionalProperties", False)
    return made


def faults(document: dict[str, Any], schema: dict[str, Any], value: Any) -> list[str]:
    """What is wrong with a value, undescribed properties included."""
    root = closed({**schema, "components": {"schemas": document["components"]["schemas"]}})
    found = Draft202012Validator(root, format_checker=FormatChecker()).iter_errors(value)
    return [f"{leaf.json_path}: {leaf.message[:300]}" for error in found for leaf in _leaves(error)]


def _leaves(error: ValidationError) -> Iterator[ValidationError]:
    """Of a choice between schemas, what was wrong with each."""
    if not error.context:
        yield error
    for part in error.context or ():
        yield from _leaves(part)


def assert_described(document: dict[str, Any], route: str, method: str, response: Any) -> None:
    """Status, media type, headers and body of an answer are as the description says."""
    operation = document["paths"][route][method]
    described = operation["responses"].get(str(response.status_code))
    if described is None:
        assert response.status_code >= 400, (route, method, response.status_code)
        described = copy.deepcopy(document["components"]["responses"]["Problem"])
    headers = described.get("headers", {})
    undescribed = set(response.headers) - GENERAL_HEADERS - set(headers)
    assert undescribed == set(), (route, method, response.status_code)
    missing = {name for name, header in headers.items() if header.get("required")}
    assert missing <= set(response.headers), (route, method, response.status_code)
    if "content" not in described:
        assert response.content == b""
        return
    media_type = response["Content-Type"].partition(";")[0]
    assert media_type in described["content"], (route, method, media_type)
    if media_type.endswith("json"):
        schema = described["content"][media_type]["schema"]
        assert faults(document, schema, response.json()) == [], (route, method)
