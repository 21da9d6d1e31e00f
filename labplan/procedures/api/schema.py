"""The answers on procedures and routes in OpenAPI."""

from drf_spectacular.utils import extend_schema_view

from inventory.api.schema import PROJECT_CODE
from labplan.base.api.describe import (
    IDEMPOTENCY_KEY,
    IF_MATCH,
    IF_NONE_MATCH,
    REPLAYED,
    UNCHANGED,
    about,
    answer,
    answered,
    answered_sometimes,
    asked,
    component,
    decimal,
    etag,
    in_path,
    instant,
    list_of,
    list_operation,
    operation,
    or_null,
    record,
    text,
    uuid,
    whole,
    word,
)
from labplan.procedures import life, progress
from labplan.procedures.api.orders import OrderSerializer, PreviewSerializer
from labplan.procedures.api.plan_parts import REASON
from labplan.procedures.api.plan_schema import DOCUMENT, PREVIEW
from labplan.procedures.sheet.pdf import PAPERS

TAG = "Procedures"
ROUTES_TAG = "Routes"
CODE = in_path("code", "Code of the procedure.")
_LINK = text("Address of it.", "/api/v1/procedures/P-7K2M4Q9X/")
_ACTIONS = {
    "type": "object",
    "description": "What you may do now, as far as the state allows it and it is served: the "
    "action and where to POST it.",
    "propertyNames": {"enum": sorted(set(life.ACTIONS) - life.OWN_ACTIONS)},
    "additionalProperties": {"type": "string", "format": "uri-reference"},
    "examples": [{"cancel": "/api/v1/procedures/P-7K2M4Q9X/cancel/"}],
}
_SUMMARY = {
    "code": text("Code of the procedure.", "P-7K2M4Q9X"),
    "project": PROJECT_CODE,
    "requested_by": text("Code of the person who asked.", "KIRA"),
    "target_smiles": text("The target as it was asked for."),
    "product_mass_g": or_null(decimal("Mass of product asked for [g].", "2")),
    "acceptor_amount_mmol": or_null(decimal("Amount of acceptor asked for [mmol].", "1")),
    "promoter": or_null(text("Promoter insisted on, by substance code.")),
    "solvent": or_null(text("Solvent insisted on, by substance code.")),
    "state": word("Where it stands.", life.STATES, "planned"),
    "actions": _ACTIONS,
    "reasons": list_of(REASON, "Why it is refused, short or failed."),
    "reservation": or_null(uuid("Code of the reservation that holds its material.")),
    "lost_holds": list_of(
        record(
            {
                "line": whole("Number of the line in the reservation.", 1, minimum=1),
                "bottle": text("Code of the bottle.", "GPA-1"),
                "amount": text("What it held.", "2854 mg"),
                "why": text("What has happened to the bottle.", "it is quarantined"),
            }
        ),
        "Holds that were cancelled since it was planned, because the bottle does not allow them "
        "any more; empty while all of its material is set aside.",
    ),
    "created_at": instant("When it was asked for, in UTC."),
    "settled_at": or_null(instant("When planning ended, in UTC; null while it is queued.")),
    "document_sha256": or_null(text("SHA-256 of the document's bytes, in hexadecimal.")),
    "links": record(
        {
            "self": about(_LINK, "Address of the procedure."),
            "document": or_null(about(_LINK, "Address of the document, once there is one.")),
            "sheet_html": or_null(about(_LINK, "Address of the sheet as a page.")),
            "sheet_pdf": or_null(about(_LINK, "Address of the sheet as a PDF.")),
        },
        "Where the rest is.",
    ),
}
PROCEDURE = component("Procedure", "A requested procedure, without its document.", _SUMMARY)
_PROGRESS = record(
    {
        "phase": word("The part of planning it is in.", list(progress.PHASES)),
        "text": text("The same for a person to read.", progress.PHASES[progress.WAITING]),
        "queued_before": or_null(
            whole(
                "How many procedures of all projects were asked for before it and are queued "
                "still; null when it is not queued.",
                0, minimum=0,
            )
        ),
    },
    "How far planning has come.",
)  # fmt: skip
PROCEDURE_DETAIL = component(
    "ProcedureDetail",
    "A requested procedure with its document.",
    {**_SUMMARY, "progress": _PROGRESS, "document": or_null(DOCUMENT)},
)
_PREFER_WAIT = asked(
    "Prefer",
    "`wait=N`: hold the answer for up to N seconds while it is queued, 10 at most (RFC 7240). "
    "Honoured where the waiting service is asked, as at the address `make serve` prints.",
    {"type": "string", "examples": ["wait=10"]}, header=True,
)  # fmt: skip
_EXAMPLE = {
    "target_smiles": "CCCCCCCCO[C@@H]1O[C@H](COC(C)=O)[C@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O",
    "product_mass_g": "2.000",
}
_ONE_SCALE = (
    "The scale is product_mass_g or acceptor_amount_mmol, never both. A structure that cannot be "
    "read, or is no defined glycoside, is answered 422 with the reason in `errors`."
)

route_preview = extend_schema_view(
    post=operation(
        "route-preview", ROUTES_TAG, "Preview the routes to a target",
        {200: answer(PREVIEW, "Every route, or why there is none.")},
        description="Says what could be made, how, and from which bottles, on the stock as it is "
        f"now. Nothing is stored or held, so a token of scope read will do. {_ONE_SCALE} Without "
        "a scale it is reckoned for 1 mmol of acceptor.",
        request=PreviewSerializer, example=_EXAMPLE,
    )
)  # fmt: skip
procedure_list = extend_schema_view(
    get=list_operation(
        "procedure-list", TAG, "List procedures", PROCEDURE,
        description="Those of your projects, newest first.",
        parameters=[
            asked("project", "Code of the project."),
            asked("state", "Only these.", {"type": "string", "enum": list(life.STATES)}),
        ],
    ),
    post=operation(
        "procedure-request", TAG, "Request a procedure",
        {202: answer(PROCEDURE, "Taken; look at Location until it is no longer queued.")},
        description="Asks for a glycoside to be planned on the stock, its material set aside. "
        f"Planning runs afterwards. {_ONE_SCALE}",
        parameters=[
            IDEMPOTENCY_KEY, REPLAYED, etag(202),
            answered("Location", "Address of the procedure.", 202),
            answered("Retry-After", "Seconds after which to look.", 202),
        ],
        request=OrderSerializer, example={"project": "PROBES-03", **_EXAMPLE},
    ),
)  # fmt: skip
procedure_detail = extend_schema_view(
    get=operation(
        "procedure-detail", TAG, "Look at a procedure",
        {200: answer(PROCEDURE_DETAIL, "The procedure with its document."), 304: UNCHANGED},
        description="While it is queued, the answer says how far it is and carries Retry-After. "
        "Look again after that, or let the answer be held until it is settled by `Prefer: wait=N`.",
        parameters=[
            CODE, IF_NONE_MATCH, _PREFER_WAIT, etag(200, 304),
            answered_sometimes(
                "Retry-After", "Seconds after which to look; only while it is queued.", 200, 304
            ),
            answered_sometimes(
                "Preference-Applied", "`wait=N` when the answer was held for as long as needed.",
                200, 304,
            ),
        ],
    )
)  # fmt: skip
procedure_document = extend_schema_view(
    get=operation(
        "procedure-document", TAG, "Read the document of a procedure",
        {200: answer(DOCUMENT, "The bytes as they were stored."), 304: UNCHANGED},
        description="The canonical bytes (RFC 8785) of the plan; the ETag is their SHA-256.",
        parameters=[CODE, IF_NONE_MATCH, etag(200, 304)],
    )
)  # fmt: skip
procedure_sheet_html = extend_schema_view(
    get=operation(
        "procedure-sheet-html", TAG, "Read the sheet as a page",
        {(200, "text/html"): answer({"type": "string"}, "One page that loads nothing else.")},
        description="The sheet for the bench as HTML, to read or to print.",
        parameters=[CODE],
    )
)  # fmt: skip
procedure_sheet_pdf = extend_schema_view(
    get=operation(
        "procedure-sheet-pdf", TAG, "Read the sheet as a PDF",
        {
            (200, "application/pdf"): answer({"type": "string", "format": "binary"}, "The sheet."),
            304: UNCHANGED,
        },
        description="The sheet for the bench, to print. The same state, document and paper give "
        "the same bytes.",
        parameters=[
            CODE, IF_NONE_MATCH, etag(200, 304),
            asked(
                "paper", "Size of the paper.",
                {"type": "string", "enum": sorted(PAPERS), "default": "a4"},
            ),
            answered("Content-Disposition", "A name for the file.", 200),
        ],
    )
)  # fmt: skip
procedure_cancel = extend_schema_view(
    post=operation(
        "procedure-cancel", TAG, "Cancel a procedure",
        {200: answer(PROCEDURE, "The procedure, cancelled.")},
        description="Ends a queued, planned or approved procedure; what it holds is given back at "
        "once. Takes no body, or an empty object.",
        parameters=[CODE, IDEMPOTENCY_KEY, IF_MATCH, REPLAYED, etag(200)],
    )
)  # fmt: skip
