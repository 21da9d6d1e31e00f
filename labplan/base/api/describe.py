"""Building blocks for describing answers in OpenAPI: JSON Schemas with units and examples.

Requests are described by the serializers that read them. Answers are built by plain functions,
so their schemas stand in each app's `api/schema.py`; tests hold real answers against them.
"""

from collections.abc import Sequence
from typing import Any

from drf_spectacular.utils import OpenApiExample, OpenApiParameter, OpenApiResponse, extend_schema

from labplan.base.fields import DECIMAL_TEXT

Schema = dict[str, Any]
PROBLEM = "application/problem+json"
ANSWERED_DECIMAL = r"^-?[0-9]+(\.[0-9]+)?$"
ASKED_DECIMAL = f"^{DECIMAL_TEXT.pattern}$"
_components: dict[str, Schema] = {}


def component(name: str, description: str, properties: dict[str, Schema], **more: Any) -> Schema:
    """Name an object of which every property is always there; return a reference to it."""
    if name in _components:
        raise ValueError(f"two schemas are called {name}")
    _components[name] = {**record(properties, description), **more}
    return {"$ref": f"#/components/schemas/{name}"}


def registered_components() -> dict[str, Schema]:
    return dict(_components)


def record(properties: dict[str, Schema], description: str = "") -> Schema:
    """An object; all of its properties are always there, null where nothing applies."""
    return {
        "type": "object",
        **({"description": description} if description else {}),
        "properties": properties,
        "required": list(properties),
    }


def text(description: str, example: str | None = None, **more: Any) -> Schema:
    return {"type": "string", "description": description, **_example(example), **more}


def word(description: str, allowed: Sequence[str], example: str | None = None) -> Schema:
    """One of a few words."""
    return text(description, example or allowed[0], enum=list(allowed))


def decimal(description: str, example: str = "1.5") -> Schema:
    """A decimal number as text, so that no digit is lost or made up on the way."""
    return text(description, example, pattern=ANSWERED_DECIMAL)


def number(description: str, example: float = 1.5) -> Schema:
    return {"type": "number", "description": description, **_example(example)}


def whole(description: str, example: int | None = None, **more: Any) -> Schema:
    return {"type": "integer", "description": description, **_example(example), **more}


def flag(description: str, example: bool = True) -> Schema:
    return {"type": "boolean", "description": description, **_example(example)}


def day(description: str, example: str = "2026-12-01") -> Schema:
    return text(description, example, format="date")


def instant(description: str, example: str = "2026-12-01T12:00:00+00:00") -> Schema:
    return text(description, example, format="date-time")


def uuid(description: str, example: str = "0a6f0f6e-7a52-4a8e-9d0c-0d0f6b7f4c11") -> Schema:
    return text(description, example, format="uuid")


def or_null(schema: Schema) -> Schema:
    if "$ref" in schema:
        rest = {key: value for key, value in schema.items() if key != "$ref"}
        return {"anyOf": [{"$ref": schema["$ref"]}, {"type": "null"}], **rest}
    words = {"enum": [*schema["enum"], None]} if "enum" in schema else {}
    return {**schema, "type": [schema["type"], "null"], **words}


def list_of(schema: Schema, description: str = "") -> Schema:
    described = {"description": description} if description else {}
    return {"type": "array", **described, "items": schema}


def about(schema: Schema, description: str) -> Schema:
    """The same schema with words of its own for this place."""
    return {**schema, "description": description}


def page_of(schema: Schema) -> Schema:
    """A page of rows of a named schema, itself named after it."""
    row = schema["$ref"].rsplit("/", 1)[1]
    return component(
        f"{row}Page",
        "A page of a list. Follow `next` until it is null.",
        {
            "next": or_null(text("The next page; null on the last.", format="uri")),
            "previous": or_null(text("The page before; null on the first.", format="uri")),
            "results": list_of(schema, "The rows."),
        },
    )


# ---- operations ----


def asked(
    name: str, description: str, schema: Schema | None = None, *, header: bool = False,
    required: bool = False,
) -> OpenApiParameter:  # fmt: skip
    """A query parameter or a request header."""
    where = OpenApiParameter.HEADER if header else OpenApiParameter.QUERY
    kind = schema or {"type": "string"}
    return OpenApiParameter(name, kind, where, required=required, description=description)


def in_path(name: str, description: str, **schema: Any) -> OpenApiParameter:
    kind = {"type": "string", **schema}
    return OpenApiParameter(name, kind, OpenApiParameter.PATH, description=description)


def answered(name: str, description: str, *statuses: int) -> OpenApiParameter:
    """A header of the answer."""
    return OpenApiParameter(
        name, {"type": "string"}, OpenApiParameter.HEADER, required=True, response=list(statuses),
        description=description,
    )  # fmt: skip


def answered_sometimes(name: str, description: str, *statuses: int) -> OpenApiParameter:
    """A header that only some of the answers have."""
    return OpenApiParameter(
        name, {"type": "string"}, OpenApiParameter.HEADER, response=list(statuses),
        description=description,
    )  # fmt: skip


PAGE_PARAMETERS = (
    asked("cursor", "Where the page starts: take it from `next` or `previous`, as it is."),
    asked(
        "page_size", "How many rows a page has; more than 200 is cut to 200.",
        {"type": "integer", "minimum": 1, "default": 50},
    ),
)  # fmt: skip
IDEMPOTENCY_KEY = asked(
    "Idempotency-Key",
    "A new random value for each new request (a UUID does). The same value with the same request "
    "gives the first answer again and does nothing twice.",
    {"type": "string", "pattern": r"^[\x21-\x7e]{8,128}$"},
    header=True, required=True,
)  # fmt: skip
IF_MATCH = asked(
    "If-Match", "The ETag of the copy you decided on; `*` acts on whatever it is now.",
    header=True, required=True,
)  # fmt: skip
IF_NONE_MATCH = asked(
    "If-None-Match", "The ETag you have: unchanged is answered 304 without a body.", header=True
)
UNCHANGED = OpenApiResponse(description="Not changed since the ETag in If-None-Match.")
REPLAYED = OpenApiParameter(
    "Idempotency-Replayed", {"type": "string", "enum": ["true"]}, OpenApiParameter.HEADER,
    response=[200, 202],
    description="Only when this is the first answer to an earlier request with the same key.",
)  # fmt: skip


def etag(*statuses: int) -> OpenApiParameter:
    return answered("ETag", "The version, for If-Match and If-None-Match.", *statuses)


def operation(
    name: str, tag: str, summary: str, answers: dict[int | tuple[int, str], Any], *,
    description: str = "", parameters: Sequence[OpenApiParameter] = (), request: Any = None,
    example: dict[str, Any] | None = None,
) -> Any:  # fmt: skip
    """The decorator of one method of a view; `example` is of its body."""
    examples = [OpenApiExample("example", example, request_only=True)] if example else []
    return extend_schema(
        operation_id=name, tags=[tag], summary=summary, description=description or summary,
        parameters=list(parameters), request=request, responses=answers,
        examples=examples,
    )  # fmt: skip


def list_operation(
    name: str, tag: str, summary: str, row: Schema, *,
    description: str = "", parameters: Sequence[OpenApiParameter] = (),
) -> Any:  # fmt: skip
    return operation(
        name, tag, summary, {200: answer(page_of(row), "A page of rows.")},
        description=description, parameters=[*parameters, *PAGE_PARAMETERS],
    )  # fmt: skip


def answer(schema: Schema | type[bytes] | None, description: str) -> OpenApiResponse:
    return OpenApiResponse(response=schema, description=description)


def _example(value: Any) -> Schema:
    return {} if value is None else {"examples": [value]}
