"""The documentation page as plain values, from the OpenAPI document alone."""

import json
import re
from typing import Any

from django.utils.html import escape, format_html, format_html_join
from django.utils.safestring import SafeString, mark_safe

from labplan.base.api.describe import ANSWERED_DECIMAL, ASKED_DECIMAL

Schema = dict[str, Any]
# deeper than any object is nested here, and an end to what refers to itself
DEEPEST = 12


def page_of_schema(document: dict[str, Any]) -> dict[str, Any]:
    """Context of base/api.html: operations by tag, then the objects they speak of."""
    schemas = document["components"]["schemas"]
    operations = [
        _operation(method, path, described, schemas)
        for path, methods in document["paths"].items()
        for method, described in methods.items()
    ]
    return {
        "info": document["info"],
        "version": document["openapi"],
        "tags": [
            {**tag, "operations": [o for o in operations if o["tag"] == tag["name"]]}
            for tag in document["tags"]
        ],
        "objects": [
            {"name": name, "description": prose(found["description"]), "fields": _fields(found)}
            for name, found in schemas.items()
        ],
    }


def _operation(
    method: str, path: str, described: dict[str, Any], schemas: dict[str, Schema]
) -> dict[str, Any]:
    request = described.get("requestBody", {}).get("content", {}).get("application/json")
    return {
        "id": described["operationId"],
        "tag": described["tags"][0],
        "method": method.upper(),
        "path": path,
        "summary": described["summary"],
        "description": prose(described["description"]),
        "parameters": [
            {
                "name": parameter["name"],
                "place": parameter["in"],
                "required": parameter.get("required", False),
                "type": type_html(parameter["schema"]),
                "description": prose(parameter["description"]),
            }
            for parameter in described.get("parameters", [])
        ],
        "request_fields": _fields(_resolve(request["schema"], schemas)) if request else [],
        "curl": _curl(method, path, described, request, schemas),
        "answers": [
            _answer(status, answer, schemas)
            for status, answer in sorted(described["responses"].items())
            if status != "default"
        ],
    }


def _answer(status: str, answer: dict[str, Any], schemas: dict[str, Schema]) -> dict[str, Any]:
    media_type, content = next(iter(answer.get("content", {}).items()), ("", {}))
    schema = content.get("schema")
    shown = schema is not None and media_type == "application/json" and schema != {"type": "object"}
    return {
        "status": status,
        "description": prose(answer["description"]),
        "media_type": media_type,
        "type": type_html(schema) if schema else "",
        "headers": [
            {"name": name, "description": prose(header["description"])}
            for name, header in sorted(answer.get("headers", {}).items())
        ],
        "example": _json(example_of(schema, schemas)) if shown else "",
    }


def _fields(schema: Schema) -> list[dict[str, Any]]:
    """The properties of an object, those of unnamed objects in it as `outer.inner`."""
    fields = []
    for name, found in schema.get("properties", {}).items():
        needed = name in schema.get("required", [])
        fields.append(
            {
                "name": name,
                "type": type_html(found),
                "needed": needed,
                "description": prose(found.get("description", "")),
            }
        )
        inner = found.get("items", found) if found.get("type") == "array" else found
        mark = "[]" if inner is not found else ""
        fields += [{**field, "name": f"{name}{mark}.{field['name']}"} for field in _fields(inner)]
    return fields


def prose(text: str) -> SafeString:
    """A description as HTML: `code` is the one mark that is used in them."""
    return mark_safe(re.sub("`([^`]+)`", r"<code>\1</code>", escape(text)))


def type_html(schema: Schema) -> SafeString:
    """What a value may be, in a few words, with links to named objects."""
    if "$ref" in schema:
        name = schema["$ref"].rsplit("/", 1)[1]
        return format_html('<a href="#{}">{}</a>', name, name)
    if "anyOf" in schema:
        return format_html_join(mark_safe(" or "), "{}", ((type_html(s),) for s in schema["anyOf"]))
    kinds = schema.get("type", "any value")
    kinds = [kinds] if isinstance(kinds, str) else kinds
    words = [_kind_html(kind, schema) for kind in kinds]
    if "enum" in schema:
        words = [format_html("<code>{}</code>", json.dumps(value)) for value in schema["enum"]]
    return format_html_join(mark_safe(" or "), "{}", ((word,) for word in words))


def _kind_html(kind: str, schema: Schema) -> SafeString:
    if kind == "array":
        return format_html("list of {}", type_html(schema["items"]))
    if kind == "string" and "format" in schema:
        return format_html("string ({})", schema["format"])
    if kind == "string" and schema.get("pattern") in (ANSWERED_DECIMAL, ASKED_DECIMAL):
        return mark_safe("decimal as text")
    if kind == "string" and "pattern" in schema:
        return format_html("string (<code>{}</code>)", schema["pattern"])
    bounds = [
        f"{word} {schema[key]:g}"
        for key, word in (("minimum", "from"), ("maximum", "to"))
        if key in schema and kind in ("integer", "number")
    ]
    return format_html("{}", " ".join([kind, *bounds]))


def example_of(schema: Schema, schemas: dict[str, Schema], depth: int = 0) -> Any:
    """A value that fits: the first example given, else one put together from the parts."""
    schema = _resolve(schema, schemas)
    if "examples" in schema:
        return schema["examples"][0]
    if "enum" in schema:
        return schema["enum"][0]
    if "anyOf" in schema:
        return example_of(schema["anyOf"][0], schemas, depth)
    kinds = schema.get("type", "null")
    kind = kinds if isinstance(kinds, str) else kinds[0]
    if kind == "object":
        return _object_example(schema, schemas, depth)
    if kind == "array":
        return [] if depth > DEEPEST else [example_of(schema["items"], schemas, depth + 1)]
    return {"string": "…", "integer": 1, "number": 1.0, "boolean": True}.get(kind)


def _object_example(schema: Schema, schemas: dict[str, Schema], depth: int) -> dict[str, Any]:
    names = schema.get("required", list(schema.get("properties", {})))
    # of properties of which exactly one is there, the first
    names = [*names, *(part["oneOf"][0]["required"][0] for part in schema.get("allOf", []))]
    return {
        name: example_of(schema["properties"][name], schemas, depth + 1)
        for name in schema.get("properties", {})
        if name in names
    }


def _curl(
    method: str, path: str, described: dict[str, Any], request: Any, schemas: dict[str, Schema]
) -> str:
    address = re.sub(r"{(\w+)}", lambda found: "$" + found[1].upper(), path)
    lines = [f"curl -X {method.upper()} http://127.0.0.1:8000{address}"]
    if described.get("security"):
        lines.append('-H "Authorization: Bearer $TOKEN"')
    headers = {"Idempotency-Key": "$(uuidgen)", "If-Match": "*"}
    lines += [
        f'-H "{parameter["name"]}: {headers[parameter["name"]]}"'
        for parameter in described.get("parameters", [])
        if parameter["in"] == "header" and parameter.get("required")
    ]
    if request:
        lines.append('-H "Content-Type: application/json"')
        example = request.get("examples")
        body = next(iter(example.values()))["value"] if example else {}
        lines.append(f"-d '{json.dumps(body or example_of(request['schema'], schemas))}'")
    return " \\\n  ".join(lines)


def _resolve(schema: Schema, schemas: dict[str, Schema]) -> Schema:
    if "$ref" in schema:
        return schemas[schema["$ref"].rsplit("/", 1)[1]]
    return schema


def _json(value: Any) -> str:
    return json.dumps(value, indent=2, ensure_ascii=False)
