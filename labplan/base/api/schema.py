"""What base answers, in OpenAPI; and what all operations of the house have in common."""

from typing import Any

from drf_spectacular.extensions import (
    OpenApiAuthenticationExtension,
    OpenApiSerializerFieldExtension,
)
from drf_spectacular.utils import extend_schema_view

from labplan.base.api.describe import (
    ASKED_DECIMAL,
    PROBLEM,
    answer,
    answered,
    component,
    flag,
    in_path,
    instant,
    list_of,
    list_operation,
    operation,
    or_null,
    record,
    registered_components,
    text,
    whole,
    word,
)
from labplan.base.api.token_bodies import LoginSerializer, TokenSerializer
from labplan.base.fields import QuantityField
from labplan.base.models import ApiTokenScope, MembershipRole

TAG = "Projects"
TOKENS_TAG = "Tokens"
ABOUT_TAG = "About this API"
CODE = text("Code of the project.", "PROBES-03")
_PROJECT = {
    "code": CODE,
    "title": text("What the project is about.", "Probes for binding studies"),
    "is_open": flag("Whether anything may still be charged to it."),
}
PROJECT = component("Project", "What material is charged to.", _PROJECT)
PROJECT_DETAIL = component(
    "ProjectDetail",
    "A project with its members.",
    {
        **_PROJECT,
        "members": list_of(
            record(
                {
                    "person": text("Code of the person.", "KIRA"),
                    "role": word("What he or she may do there.", MembershipRole.values, "chemist"),
                }
            )
        ),
    },
)
component(
    "Problem",
    "Why something was refused, and what to do (RFC 9457).",
    {
        "type": text("A name of the kind of problem.", "urn:labplan:problem:invalid_value"),
        "title": text("The kind of problem in words.", "A value breaks a rule"),
        "status": whole("The HTTP status.", 422, minimum=400, maximum=599),
        "code": text("The kind of problem for programs.", "invalid_value"),
        "detail": text("What to do about it.", "Correct the fields listed in errors."),
        "errors": list_of(
            record(
                {
                    "field": text("The field or parameter.", "product_mass_g"),
                    "code": text("What is wrong with it, for programs.", "out_of_range"),
                    "detail": text("What to do.", "Give a value from 0.001 to 1000."),
                }
            ),
            "One line a field; empty when the request as a whole is meant.",
        ),
    },
)
_PROBLEM_RESPONSE = {
    "description": "Refused: the problem says why and what to do.",
    "headers": {
        "Allow": {"description": "The methods served here.", "schema": {"type": "string"}},
        "Retry-After": {
            "description": "Seconds to wait, where trying again helps (busy, request_running, "
            "too_many_attempts).",
            "schema": {"type": "string"},
        },
        "WWW-Authenticate": {
            "description": "How to send a token; with 401.",
            "schema": {"type": "string"},
        },
    },
    "content": {PROBLEM: {"schema": {"$ref": "#/components/schemas/Problem"}}},
}

_TOKEN = {
    "id": whole("Number of the token.", 7, minimum=1),
    "name": text("What it is for.", "laptop"),
    "scope": word("What it may do.", ApiTokenScope.values),
    "created_at": instant("When it was made, in UTC."),
    "expires_at": instant("When it ends, in UTC."),
    "last_used_at": or_null(instant("When it was used last, to the hour; null if never.")),
    "revoked_at": or_null(instant("When it was revoked; null while it is good.")),
    "is_current": flag("Whether it is the one this request came with.", example=False),
}
TOKEN = component("Token", "A token of yours, without its text.", _TOKEN)
NEW_TOKEN = component(
    "NewToken",
    "A new token. Its text is shown this once and cannot be read again.",
    {**_TOKEN, "token": text("To be sent as 'Authorization: Bearer ...'.", "lpt_...")},
)
_NOT_STORED = answered("Cache-Control", "The text of a token is to lie in no cache.", 201)
token_list = extend_schema_view(
    get=list_operation(
        "token-list", TOKENS_TAG, "List your tokens", TOKEN,
        description="Your own, newest first, those that have ended included.",
    ),
    post=operation(
        "token-make", TOKENS_TAG, "Make a token of your own",
        {201: answer(NEW_TOKEN, "Made; note the text now.")},
        description="Needs a token of scope write. It takes no Idempotency-Key: answers to "
        "requests with a key are stored, and the text of a token never is. Sent twice it makes "
        "two tokens; revoke the one you do not know.",
        parameters=[_NOT_STORED], request=TokenSerializer, example={"name": "balance", "days": 30},
    ),
)  # fmt: skip
token_revoke = extend_schema_view(
    post=operation(
        "token-revoke", TOKENS_TAG, "Revoke a token of your own",
        {200: answer(TOKEN, "Ended, from the next request on.")},
        description="At once and for good; a repeat changes nothing. A token of scope read can "
        "end itself only.",
        parameters=[in_path("token_id", "Number of the token.", type="integer")],
    )
)  # fmt: skip
login = extend_schema_view(
    post=operation(
        "login", TOKENS_TAG, "Log in with a password",
        {201: answer(NEW_TOKEN, "A token for 12 hours.")},
        description="Needs no token. After 5 failures for a code or 30 from an address within a "
        "quarter of an hour it answers 429, with Retry-After, whether the password is right or "
        "not.",
        parameters=[_NOT_STORED], request=LoginSerializer,
        example={"person": "KIRA", "password": "not this one"},
    )
)  # fmt: skip
project_list = extend_schema_view(
    get=list_operation(
        "project-list", TAG, "List your projects", PROJECT,
        description="The projects you belong to, by code.",
    )
)  # fmt: skip
project_detail = extend_schema_view(
    get=operation(
        "project-detail", TAG, "Look at a project", {200: answer(PROJECT_DETAIL, "The project.")},
        description="A project you belong to, with its members.",
        parameters=[in_path("code", "Code of the project.")],
    )
)  # fmt: skip
openapi_document = extend_schema_view(
    get=operation(
        "openapi-document", ABOUT_TAG, "Read this description",
        {200: answer({"type": "object"}, "An OpenAPI 3.1 document.")},
        description="This API in OpenAPI 3.1. Needs no token: it holds no data of the laboratory.",
    )
)  # fmt: skip
documentation_page = extend_schema_view(
    get=operation(
        "documentation-page", ABOUT_TAG, "Read this description as a page",
        {(200, "text/html"): answer({"type": "string"}, "A page that loads nothing else.")},
        description="The same for people, as one HTML page. Needs no token.",
    )
)  # fmt: skip


class BearerTokenScheme(OpenApiAuthenticationExtension):
    target_class = "labplan.base.authentication.BearerTokenAuthentication"
    name = "bearer"

    def get_security_definition(self, auto_schema: Any) -> dict[str, Any]:
        return {
            "type": "http",
            "scheme": "bearer",
            "description": "A token made with `manage.py create_token`, of scope read or write.",
        }


class QuantitySchema(OpenApiSerializerFieldExtension):
    """Amounts are read as JSON numbers or as text, and both exactly."""

    target_class = QuantityField

    def map_serializer_field(self, auto_schema: Any, direction: str) -> dict[str, Any]:
        field = self.target
        return {
            "anyOf": [
                {
                    "type": "number",
                    "minimum": float(field.lowest),
                    "maximum": float(field.highest),
                },
                {"type": "string", "pattern": ASKED_DECIMAL},
            ]
        }


def keep_what_is_versioned(endpoints: list[Any], **_context: Any) -> list[Any]:
    """Hook of the generator: what also lies at the root is described once, under the prefix."""
    return [endpoint for endpoint in endpoints if endpoint[0].startswith("/api/")]


def add_what_all_share(result: dict[str, Any], **_context: Any) -> dict[str, Any]:
    """Hook of the generator: the schemas by name, and the problem every operation may answer."""
    components = result.setdefault("components", {})
    read = components.get("schemas", {})
    for schema in read.values():
        schema["additionalProperties"] = False  # StrictSerializer refuses what it does not know
    schemas = {**read, **registered_components()}
    components["schemas"] = dict(sorted(schemas.items()))
    components["responses"] = {"Problem": _PROBLEM_RESPONSE}
    for methods in result["paths"].values():
        for described in methods.values():
            described["responses"]["default"] = {"$ref": "#/components/responses/Problem"}
    return result
