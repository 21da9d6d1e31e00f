"""The stock's answers in OpenAPI."""

from drf_spectacular.utils import extend_schema_view

from inventory.models import Bottle, Hold, Movement, Reservation, Substance
from labplan.base.api.describe import (
    IF_NONE_MATCH,
    UNCHANGED,
    Schema,
    about,
    answer,
    asked,
    component,
    day,
    decimal,
    etag,
    flag,
    in_path,
    instant,
    list_of,
    list_operation,
    operation,
    or_null,
    text,
    uuid,
    whole,
    word,
)

TAG = "Stock"
DAY = {"type": "string", "format": "date"}
YES_OR_NO = {"type": "string", "enum": ["true", "false"]}
HOLDS_TAG = "Reservations"
SUBSTANCE_CODE = text("Code of the substance.", "1-octanol")
BOTTLE_CODE = text("Code of the bottle.", "GPA-1")
PROJECT_CODE = text("Code of the project.", "PROBES-03")
PERSON_CODE = text("Code of the person.", "KIRA")
DENSITY = or_null(decimal("Density [g/mL]; null when not known.", "0.827"))
_ONE_OF_THREE = "Of mass, volume and pieces only the one is there that fits measured_by."


def amounts(prefix: str, what: str, example: str = "2500") -> dict[str, Schema]:
    """The three forms an amount may have; a bottle is weighed, measured or counted."""
    return {
        f"{prefix}mass_mg": decimal(f"{what} [mg], of what is weighed.", example),
        f"{prefix}volume_ml": decimal(f"{what} [mL], of what is measured.", example),
        f"{prefix}pieces": decimal(f"{what}, of what is counted.", example),
    }


def with_amounts(
    name: str, description: str, properties: dict[str, Schema], groups: dict[str, dict[str, Schema]]
) -> Schema:
    """A component in which each group of amounts appears in exactly one of its forms."""
    forms = {key: schema for group in groups.values() for key, schema in group.items()}
    required = [key for key in properties if key not in forms]
    return component(
        name, f"{description} {_ONE_OF_THREE}", {**properties, **forms}, required=required,
        allOf=[
            {"oneOf": [{"required": [key]} for key in group]} for group in groups.values()
        ],
    )  # fmt: skip


SUBSTANCE = component(
    "Substance",
    "What a bottle holds, whatever its form.",
    {
        "code": SUBSTANCE_CODE,
        "kind": word("Whether it has one structure.", Substance.Kind.values),
        "name": text("Its name.", "1-octanol"),
        "cas": or_null(text("CAS registry number.", "111-87-5")),
        "smiles": or_null(text("Isomeric SMILES, of what is defined.", "CCCCCCCCO")),
        "inchikey": or_null(text("Of what is defined.", "KBPLFHHGFOOTCA-UHFFFAOYSA-N")),
        "formula": or_null(text("Molecular formula (Hill).", "C8H18O")),
        "molar_mass_g_per_mol": or_null(decimal("Molar mass [g/mol].", "130.231")),
        "density_g_per_ml": DENSITY,
        "density_temperature_c": or_null(decimal("Temperature of the density [°C].", "20")),
        "density_source": or_null(text("Where the density was taken from.")),
        "minimum": or_null(
            with_amounts(
                "Minimum",
                "The stockroom buys when less than this can be used.",
                {},
                {"least": amounts("", "At least")},
            )
        ),
    },
)
BOTTLE_FIELDS = {
    "code": BOTTLE_CODE,
    "substance": SUBSTANCE_CODE,
    "name": text("Name of the substance.", "1-octanol"),
    "form": text("How the substance comes: neat, hydrate, solution, salt ...", "neat"),
    "measured_by": word("How amounts of it are measured.", Bottle.MeasuredBy.values),
    "assay_pct": or_null(decimal("Assay [%]; null when not known.", "99.0")),
    "assay_of": text("What the assay is of.", "as_is"),
    "assay_kind": word("How the assay was found.", Bottle.AssayKind.values),
    "density_g_per_ml": DENSITY,
    "stabiliser": text(
        "Name of the stabiliser, or: none, unknown, not_applicable.", "not_applicable"
    ),
    "place": text("Code of the place it stands at.", "CAB-A"),
    "lot": or_null(text("Lot on the label.", "L-2207")),
    "received_on": day("When it came."),
    "opened_on": or_null(day("When it was opened; null when it is still sealed.")),
    "expires_on": or_null(day("Good to the end of this day, in the laboratory's time zone.")),
    "status": word("Whether it may be used.", Bottle.Status.values),
    "tare_mg": or_null(decimal("The empty bottle [mg]; null until it was weighed.", "96500")),
    "parent": or_null(text("Code of the bottle it was filled from.", "DCM-1")),
    "preparation": or_null(text("What was made of it in the house.", "dried over 3A sieves")),
}
BOTTLE_GROUPS = {
    "on_hand": amounts("on_hand_", "What is in it by the book"),
    "usable": amounts("usable_", "What is free: on hand less held less what cannot be got out"),
    "least": amounts("least_dispensed_", "Less than this is never set aside or decanted", "1"),
}
BOTTLE = with_amounts(
    "Bottle",
    "One physical bottle, with what is on hand and what is free; not who holds the rest.",
    BOTTLE_FIELDS,
    BOTTLE_GROUPS,
)
PLACE = component(
    "Place",
    "Where bottles stand.",
    {
        "code": text("Code of the place.", "CAB-A"),
        "name": text("Its name.", "Solvent cabinet A"),
        "is_locked": flag("Whether it is kept locked.", example=False),
        "temperature_c": or_null(decimal("Its temperature [°C].", "4")),
    },
)
MOVEMENT = with_amounts(
    "Movement",
    "One line of a bottle's book. Lines are never changed.",
    {
        "seq": whole("Number of the line, from 1 without gaps.", 2, minimum=1),
        "kind": word("What happened.", Movement.Kind.values, "hold"),
        "entered": text("The amount as it was typed or weighed, with its unit.", "2.5 g"),
        "density_g_per_ml": or_null(decimal("Density it was converted with [g/mL].", "1.326")),
        "density_source": or_null(text("Where that density is from.", "label at 20 °C")),
        "amount_mmol": or_null(decimal("Amount of the pure substance [mmol].", "6.4")),
        "operation": uuid("Shared by all lines that were written together."),
        "project": or_null(PROJECT_CODE),
        "actor": PERSON_CODE,
        "reason": text("Why; may be empty.", "procedure P-7K2M4Q9X"),
        "booked_on": day("The laboratory's date."),
        "recorded_at": instant("When the line was written, in UTC."),
    },
    {
        "on_hand_change": amounts("on_hand_change_", "Change of what is on hand", "0"),
        "held_change": amounts("held_change_", "Change of what is held"),
        "on_hand_after": amounts("on_hand_after_", "On hand after this line"),
        "held_after": amounts("held_after_", "Held after this line"),
    },
)
HOLD = with_amounts(
    "Hold",
    "An amount of one bottle set aside.",
    {
        "line": whole("Number of the line in its reservation.", 1, minimum=1),
        "bottle": BOTTLE_CODE,
        "state": word("How it stands.", Hold.State.values),
    },
    {
        "amount": amounts("", "Set aside"),
        "used": amounts("used_", "Used of it", "0"),
        "given_back": amounts("given_back_", "Given back of it", "0"),
    },
)
RESERVATION_FIELDS = {
    "code": uuid("Code of the reservation."),
    "project": PROJECT_CODE,
    "actor": about(PERSON_CODE, "Code of the person it was made for."),
    "purpose": text("What it is for.", "procedure P-7K2M4Q9X"),
    "state": word("Open while it holds anything.", Reservation.State.values),
    "is_firm": flag("Approved: given up last when a bottle holds less than was thought."),
    "expires_on": day("Set aside until this day."),
    "created_at": instant("When it was made, in UTC."),
    "holds": list_of(HOLD, "By line."),
}
RESERVATION = component(
    "Reservation", "A set of holds that stands or falls together.", RESERVATION_FIELDS
)

substance_list = extend_schema_view(
    get=list_operation(
        "substance-list", TAG, "List substances", SUBSTANCE, description="All substances, by code.",
        parameters=[
            asked("name", "Part of the name; case, accents and Greek letters do not matter."),
            asked("cas", "The whole CAS registry number."),
            asked("under_minimum", "true: only those of which there is too little.", YES_OR_NO),
        ],
    )
)  # fmt: skip
substance_detail = extend_schema_view(
    get=operation(
        "substance-detail", TAG, "Look at a substance",
        {200: answer(SUBSTANCE, "The substance."), 304: UNCHANGED},
        parameters=[in_path("code", "Code of the substance."), IF_NONE_MATCH, etag(200, 304)],
    )
)  # fmt: skip
bottle_list = extend_schema_view(
    get=list_operation(
        "bottle-list", TAG, "List bottles", BOTTLE,
        description="All bottles with what is free of them, by code.",
        parameters=[
            asked("substance", "Code of the substance."),
            asked("place", "Code of the place."),
            asked("status", "Only these.", {"type": "string", "enum": Bottle.Status.values}),
            asked("expires_from", "Those that expire on this day or later.", DAY),
            asked("expires_until", "Those that expire on this day or earlier.", DAY),
            asked("water_ppm_above", "Those whose last water reading is above this [ppm]."),
            asked("under_minimum", "true: of substances of which there is too little.", YES_OR_NO),
            asked("parent", "Those filled from this bottle, by its code."),
        ],
    )
)  # fmt: skip
bottle_detail = extend_schema_view(
    get=operation(
        "bottle-detail", TAG, "Look at a bottle",
        {200: answer(BOTTLE, "The bottle."), 304: UNCHANGED},
        parameters=[in_path("code", "Code of the bottle."), IF_NONE_MATCH, etag(200, 304)],
    )
)  # fmt: skip
movement_list = extend_schema_view(
    get=list_operation(
        "movement-list", TAG, "Read the book of a bottle", MOVEMENT,
        description="Newest line first. Stock keepers, administrators and auditors read all of "
        "it; everybody else the lines of his or her own projects.",
        parameters=[in_path("code", "Code of the bottle.")],
    )
)  # fmt: skip
place_list = extend_schema_view(
    get=list_operation(
        "place-list", TAG, "List places", PLACE, description="All places of the stock, by code."
    )
)
reservation_list = extend_schema_view(
    get=list_operation(
        "reservation-list", HOLDS_TAG, "List reservations", RESERVATION,
        description="Those of your projects, newest first.",
        parameters=[
            asked("project", "Code of the project."),
            asked("state", "Only these.", {"type": "string", "enum": Reservation.State.values}),
            asked("actor", "Those made for this person, by code."),
            asked("bottle", "Those that still hold something of this bottle."),
            asked("substance", "Those that still hold something of this substance."),
            asked("expires_from", "Set aside until this day or later.", DAY),
            asked("expires_until", "Set aside until this day or shorter.", DAY),
        ],
    )
)  # fmt: skip
reservation_detail = extend_schema_view(
    get=operation(
        "reservation-detail", HOLDS_TAG, "Look at a reservation",
        {200: answer(RESERVATION, "The reservation with its holds."), 304: UNCHANGED},
        parameters=[
            in_path("code", "Code of the reservation.", format="uuid"), IF_NONE_MATCH,
            etag(200, 304),
        ],
    )
)  # fmt: skip
