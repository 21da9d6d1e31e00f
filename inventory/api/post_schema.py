"""What changes the stock, in OpenAPI."""

from collections.abc import Sequence
from typing import Any

from drf_spectacular.extensions import OpenApiSerializerFieldExtension
from drf_spectacular.utils import OpenApiParameter, extend_schema_view

from inventory.api import bottle_orders, orders, receipt_orders
from inventory.api.schema import (
    BOTTLE,
    BOTTLE_CODE,
    BOTTLE_FIELDS,
    BOTTLE_GROUPS,
    HOLDS_TAG,
    PROJECT_CODE,
    RESERVATION,
    RESERVATION_FIELDS,
    SUBSTANCE,
    SUBSTANCE_CODE,
    TAG,
    YES_OR_NO,
    amounts,
    with_amounts,
)
from inventory.models import Notice, Reading
from inventory.services.counting import WORDS
from labplan.base.api.describe import (
    IDEMPOTENCY_KEY,
    IF_MATCH,
    answer,
    answered,
    asked,
    component,
    day,
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

_BOTTLE_PATH = in_path("code", "Code of the bottle.")
_RESERVATION_PATH = in_path("code", "Code of the reservation.", format="uuid")
_FACT = (
    "It is a fact and never refused: holds that cannot be kept any more are cancelled, those "
    "nobody approved first, of these the latest first, and their people find a notice."
)
_CANCELLED = whole("Holds, of whomever, that were cancelled by it.", 0, minimum=0)


def _written(
    name: str, tag: str, summary: str, status: int, schema: Any, told: str, *, description: str,
    request: Any, example: dict[str, Any], parameters: Sequence[OpenApiParameter] = (),
) -> Any:  # fmt: skip
    replayed = OpenApiParameter(
        "Idempotency-Replayed", {"type": "string", "enum": ["true"]}, OpenApiParameter.HEADER,
        response=[status],
        description="Only when this is the first answer to an earlier request with the same key.",
    )  # fmt: skip
    return operation(
        name, tag, summary, {status: answer(schema, told)}, description=description,
        parameters=[*parameters, IDEMPOTENCY_KEY, replayed], request=request, example=example,
    )  # fmt: skip


RESERVATION_MADE = component(
    "ReservationMade",
    "A reservation, and what of the request it does not meet.",
    {
        **RESERVATION_FIELDS,
        "shortfalls": list_of(
            record(
                {
                    "line": whole("Number of the line of the request.", 1, minimum=1),
                    "detail": text("What is missing.", "A: 90 mg needed, 80 mg can be used."),
                }
            ),
            "Empty when all of it is set aside.",
        ),
    },
)
RESERVATION_USED = component(
    "ReservationUsed",
    "A reservation after a use.",
    {**RESERVATION_FIELDS, "cancelled_holds": _CANCELLED},
)


class CellSchema(OpenApiSerializerFieldExtension):
    """A cell of the stock file as what its column holds."""

    target_class = receipt_orders.CellField

    def map_serializer_field(self, auto_schema: Any, direction: str) -> dict[str, Any]:
        return dict(self.target.schema)


BOTTLE_MOVED = with_amounts(
    "BottleMoved",
    "A bottle after what has happened to it.",
    {**BOTTLE_FIELDS, "cancelled_holds": _CANCELLED},
    BOTTLE_GROUPS,
)
READING = component(
    "Reading",
    "A measurement on a bottle.",
    {
        "kind": word("What was measured.", Reading.Kind.values),
        "value": decimal("Its value, in the unit that the kind names.", "12"),
        "method": or_null(text("How it was measured.", "Karl Fischer")),
        "read_on": day("The day of the measurement."),
        "recorded_at": instant("When it was written down, in UTC."),
    },
)
COUNTED = with_amounts(
    "Counted",
    "What a count of one bottle found.",
    {
        "bottle": BOTTLE_CODE,
        "verdict": word("What follows from it.", list(WORDS)),
        "detail": text("The same in words.", WORDS["under_1_pct"]),
    },
    {
        "book": amounts("book_", "On hand by the book before"),
        "found": amounts("found_", "What was found"),
        "uncertainty": amounts("uncertainty_", "A smaller difference is none", "20"),
    },
)
COUNTS = component(
    "Counts",
    "A stock-take.",
    {"lines": list_of(COUNTED, "By bottle."), "cancelled_holds": _CANCELLED},
)
QUOTA = with_amounts(
    "Quota",
    "How much of a substance a project may claim in a period.",
    {
        "project": PROJECT_CODE,
        "substance": SUBSTANCE_CODE,
        "starts_on": day("First day.", "2026-01-01"),
        "ends_on": day("Last day.", "2026-12-31"),
        "reason": text("Why; may be empty."),
    },
    {
        "amount": amounts("", "At most"),
        "claimed": amounts("claimed_", "Set aside or used so far", "500"),
        "left": amounts("left_", "What is left", "2000"),
    },
)
NOTICE = component(
    "Notice",
    "What the stock has to tell you.",
    {
        "id": whole("Its number.", 1, minimum=1),
        "kind": word("What it is about.", Notice.Kind.values),
        "project": PROJECT_CODE,
        "bottle": BOTTLE_CODE,
        "reservation": uuid("Code of the reservation that is hit."),
        "line": whole("Number of the line in it.", 1, minimum=1),
        "detail": text("What has happened and what to do."),
        "created_at": instant("When, in UTC."),
        "read_at": or_null(instant("When you marked it as read; null until then.")),
    },
)

reservation_make = extend_schema_view(
    post=_written(
        "reservation-make", HOLDS_TAG, "Set amounts aside", 201, RESERVATION_MADE,
        "Set aside.",
        description="By bottle, or by substance: then bottles are chosen that may be used today "
        "and are as asked; the first to expire, then the one already open, and one bottle rather "
        "than two. All lines or none, or with `takes_what_there_is` as much as there is.",
        request=orders.ReservationOrderSerializer,
        example={
            "project": "PROBES-03", "purpose": "drying test",
            "lines": [
                {"bottle": "GPA-1", "mass_mg": "500"},
                {"substance": "dichloromethane", "volume_ml": "25", "water_ppm_max": "30"},
            ],
        },
        parameters=[etag(201), answered("Location", "Address of the reservation.", 201)],
    )
)  # fmt: skip
reservation_use = extend_schema_view(
    post=_written(
        "reservation-use", HOLDS_TAG, "Record what was used", 200, RESERVATION_USED, "Recorded.",
        description=f"What was really weighed or measured, by line. {_FACT} Less than was held "
        "gives the rest back, more comes from free stock.",
        request=orders.UseSerializer, example={"lines": [{"line": 1, "mass_mg": "498.2"}]},
        parameters=[_RESERVATION_PATH, etag(200)],
    )
)  # fmt: skip
reservation_release = extend_schema_view(
    post=_written(
        "reservation-release", HOLDS_TAG, "Give a reservation back", 200, RESERVATION, "Closed.",
        description="Everything that it still holds is free again.",
        request=orders.ReleaseSerializer, example={"reason": "not needed"},
        parameters=[_RESERVATION_PATH, IF_MATCH, etag(200)],
    )
)  # fmt: skip
reservation_extend = extend_schema_view(
    post=_written(
        "reservation-extend", HOLDS_TAG, "Keep a reservation longer", 200, RESERVATION,
        "Extended.",
        description="Never to an earlier day, and at most 92 days from today.",
        request=orders.ExtendSerializer, example={"expires_on": "2026-12-20"},
        parameters=[_RESERVATION_PATH, IF_MATCH, etag(200)],
    )
)  # fmt: skip
quota_list = extend_schema_view(
    get=list_operation(
        "quota-list", HOLDS_TAG, "List quotas", QUOTA,
        description="Those of your projects, newest first, with what is left of them.",
        parameters=[
            asked("project", "Code of the project."), asked("substance", "Code of the substance."),
        ],
    ),
    post=_written(
        "quota-set", HOLDS_TAG, "Set a quota", 200, QUOTA, "The quota.",
        description="For a project, a substance and a period; the same three again change its "
        "amount. What is used is never refused by it, only what is set aside.",
        request=orders.QuotaSerializer,
        example={
            "project": "PROBES-03", "substance": "silver-triflate", "starts_on": "2026-01-01",
            "ends_on": "2026-12-31", "mass_mg": "25000",
        },
    ),
)  # fmt: skip
notice_list = extend_schema_view(
    get=list_operation(
        "notice-list", HOLDS_TAG, "Read your notices", NOTICE,
        description="What facts have done to what was set aside for you, newest first.",
        parameters=[asked("unread", "true: only those not marked as read.", YES_OR_NO)],
    )
)  # fmt: skip
notice_read = extend_schema_view(
    post=_written(
        "notice-read", HOLDS_TAG, "Mark a notice as read", 200, NOTICE, "The notice.",
        description="Takes no body, or an empty object.", request=None, example={},
        parameters=[in_path("number", "Its number.", pattern="^[0-9]+$")],
    )
)  # fmt: skip
bottle_receive = extend_schema_view(
    post=_written(
        "bottle-receive", TAG, "Receive a bottle", 201, BOTTLE, "The new bottle.",
        description="By a stock keeper. The fields are the columns of the stock file, read by the "
        "same rules: the substance is looked up by structure, CAS number or name, and made when "
        "it is new; the place must be there; what cannot be got out follows from the size.",
        request=receipt_orders.ReceiptSerializer,
        example={
            "code": "DCM-7", "substance": "dichloromethane", "amount": "2.5", "unit": "L",
            "place": "CAB-A", "received_on": "2026-12-01", "stabiliser": "none",
            "water_ppm": "18", "water_read_on": "2026-12-01",
        },
        parameters=[etag(201), answered("Location", "Address of the new bottle.", 201)],
    )
)  # fmt: skip
movement_write = extend_schema_view(
    post=_written(
        "movement-write", TAG, "Record what happened to a bottle", 201, BOTTLE_MOVED, "Recorded.",
        description="A use without a reservation, a return, a loss, a disposal or a transfer. "
        f"{_FACT} A disposal and a broken bottle take no amount: all of it is gone.",
        request=bottle_orders.MovementOrderSerializer,
        example={"kind": "use", "project": "PROBES-03", "mass_mg": "12.5", "reason": "TLC"},
        parameters=[_BOTTLE_PATH, etag(201)],
    )
)  # fmt: skip
bottle_status = extend_schema_view(
    post=_written(
        "bottle-status", TAG, "Quarantine or free a bottle", 200, BOTTLE_MOVED, "The bottle.",
        description="Everybody at the bench may stop a bottle: its holds are cancelled and their "
        "people find a notice. A stock keeper frees it.",
        request=bottle_orders.StatusSerializer,
        example={"status": "quarantined", "reason": "turned brown"},
        parameters=[_BOTTLE_PATH, IF_MATCH, etag(200)],
    )
)  # fmt: skip
bottle_decant = extend_schema_view(
    post=_written(
        "bottle-decant", TAG, "Fill a bottle from another", 201, BOTTLE, "The new bottle.",
        description="What is held, and what cannot be got out, stays in the first one. A "
        "preparation of the house says its form, stabiliser and water anew.",
        request=bottle_orders.DecantSerializer,
        example={
            "code": "DCM-1D", "volume_ml": "100", "place": "CAB-A",
            "preparation": "dried over 3A sieves for 48 h", "form": "neat",
            "stabiliser": "none", "water_ppm": "6",
        },
        parameters=[
            _BOTTLE_PATH, etag(201), answered("Location", "Address of the new bottle.", 201),
        ],
    )
)  # fmt: skip
reading_list = extend_schema_view(
    get=list_operation(
        "reading-list", TAG, "Read the measurements on a bottle", READING,
        description="Water, assay, peroxide, activation; newest first.",
        parameters=[_BOTTLE_PATH],
    ),
    post=_written(
        "reading-write", TAG, "Record a measurement", 201, READING, "The measurement.",
        description="With `has_failed` the bottle is quarantined in the same step, its holds are "
        "cancelled and their people find a notice.",
        request=bottle_orders.ReadingSerializer,
        example={"kind": "water_ppm", "value": "9", "read_on": "2026-12-01"},
        parameters=[_BOTTLE_PATH],
    ),
)  # fmt: skip
stock_count = extend_schema_view(
    post=_written(
        "stock-count", TAG, "Take stock of bottles", 200, COUNTS, "What was found.",
        description="One bottle or many, by gross weight less tare or by content; all of them or "
        "none. A difference inside the uncertainty, or under 1 % of the book, is none; any other "
        "is written as a correction.",
        request=bottle_orders.CountsSerializer,
        example={"lines": [{"bottle": "GPA-1", "gross_mg": "146500", "tare_mg": "46500"}]},
    )
)  # fmt: skip
substance_minimum = extend_schema_view(
    post=_written(
        "substance-minimum", TAG, "Set the minimum of a substance", 200, SUBSTANCE,
        "The substance.",
        description="How much the stockroom always wants to have; `has_none` takes it away.",
        request=orders.MinimumSerializer, example={"volume_ml": "2500"},
        parameters=[in_path("code", "Code of the substance."), IF_MATCH, etag(200)],
    )
)  # fmt: skip
