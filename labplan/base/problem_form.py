"""The form of a refusal on the wire (RFC 9457), for processes with Django or without."""

from typing import Any

from labplan.base.errors import DomainError

CONTENT_TYPE = "application/problem+json"
TYPE_PREFIX = "urn:labplan:problem:"


def problem_body(error: DomainError) -> dict[str, Any]:
    return {
        "type": TYPE_PREFIX + error.code,
        "title": error.title,
        "status": error.status,
        "code": error.code,
        "detail": error.detail,
        "errors": [line.as_dict() for line in error.errors],
        **{name: value for name, value in error.extra.items() if name != "retry_after_s"},
    }
