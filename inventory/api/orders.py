"""What the bodies about reservations, quotas and minimums have to say."""

from typing import Any

from rest_framework import serializers

from inventory.api.bodies import (
    MOST_LINES,
    AmountSerializer,
    DayField,
    LinesSerializer,
    base_units,
    booked_on_field,
    mass_field,
    one_asked,
    optional_text,
    pieces_field,
    read_asked,
    text_field,
    volume_field,
)
from inventory.services import Actual, QuotaOrder, ReservationLine, ReservationOrder, Wanted
from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.fields import QuantityField, StrictSerializer


class ReservationLineSerializer(AmountSerializer):
    """One line: a bottle, or a substance and what a bottle of it must be like."""

    bottle = text_field(24, "Code of the bottle; instead of a substance.", required=False)
    substance = text_field(80, "Code of a substance; bottles are chosen for you.", required=False)
    amount_mmol = QuantityField(
        lowest="0.000001", highest="1000000000", places=6, smallest="1 nanomole", required=False,
        help_text="Amount of pure substance [mmol], reckoned with each bottle's assay and form.",
    )  # fmt: skip
    form = optional_text(120, "Label of the form wanted; left out, no solution is taken.")
    assay_pct_min = QuantityField(
        lowest="0", highest="100", places=4, smallest="0.0001 %", required=False,
        help_text="The least assay on the label [%].",
    )  # fmt: skip
    water_ppm_max = QuantityField(
        lowest="0", highest="1000000", places=4, smallest="0.0001 ppm", required=False,
        help_text="The most water by mass [ppm]; a bottle without a reading that counts is not "
        "taken.",
    )  # fmt: skip
    stabilisers = serializers.ListField(
        child=serializers.CharField(max_length=60), required=False, max_length=20,
        help_text="Stabilisers allowed, by name, or none; left out, any.",
    )  # fmt: skip


class ReservationOrderSerializer(LinesSerializer):
    """What is to be set aside for a project."""

    project = text_field(24, "Code of the project that it is set aside for.")
    purpose = text_field(120, "What it is for.")
    lines = ReservationLineSerializer(many=True, allow_empty=False, max_length=MOST_LINES)
    expires_on = DayField(
        required=False, help_text="Set aside until this day; left out, for 14 days; at most 92."
    )
    takes_what_there_is = serializers.BooleanField(
        required=False, default=False,
        help_text="Set aside what there is and list the rest, instead of all or nothing.",
    )  # fmt: skip


def read_reservation(data: Any) -> tuple[str, ReservationOrder]:
    """Project code and order. Raises MalformedRequest, UnknownField or InvalidValue."""
    values = ReservationOrderSerializer(data=data).read()
    lines = tuple(_line(line, f"lines[{n}]") for n, line in enumerate(values["lines"]))
    return values["project"], ReservationOrder(
        lines, values["purpose"], values.get("expires_on"), values["takes_what_there_is"]
    )


def _line(values: dict[str, Any], where: str) -> ReservationLine:
    asked = one_asked(values, where, also=("amount_mmol",))
    bottle, substance = values.get("bottle", ""), values.get("substance", "")
    if bool(bottle) == bool(substance):
        detail = "Give a bottle or a substance, one of them."
        raise InvalidValue(
            detail, errors=(FieldProblem(f"{where}.bottle", "bottle_or_substance", detail),)
        )
    stabilisers = values.get("stabilisers")
    wanted = Wanted(
        values.get("form", ""), values.get("assay_pct_min"), values.get("water_ppm_max"),
        tuple(stabilisers) if stabilisers is not None else None,
    )  # fmt: skip
    if bottle and wanted != Wanted():
        detail = "What a bottle must be like is for a substance; a bottle is what it is."
        raise InvalidValue(detail, errors=(FieldProblem(where, "for_a_substance", detail),))
    return ReservationLine(asked, bottle, substance, wanted)


class ActualSerializer(AmountSerializer):
    """What was really weighed or measured for one line."""

    line = serializers.IntegerField(
        min_value=1, max_value=32767, help_text="Number of the line in the reservation."
    )
    bottle = text_field(
        24, "The bottle it came from, where it is another than held.", required=False
    )
    closes = serializers.BooleanField(
        required=False, default=True,
        help_text="Nothing more will be taken for this line: the rest is free again.",
    )  # fmt: skip


class UseSerializer(LinesSerializer):
    """What was used of a reservation."""

    lines = ActualSerializer(many=True, allow_empty=False, max_length=MOST_LINES)
    reason = optional_text(160, "What it was used for; left out, the purpose of the reservation.")
    booked_on = booked_on_field()


def read_use(data: Any) -> dict[str, Any]:
    values = UseSerializer(data=data).read()
    actuals = [
        Actual(
            line["line"],
            one_asked(line, f"lines[{number}]"),
            line.get("bottle", ""),
            line["closes"],
        )
        for number, line in enumerate(values["lines"])
    ]
    return {
        "actuals": actuals, "reason": values.get("reason", ""),
        "booked_on": values.get("booked_on"),
    }  # fmt: skip


class ReleaseSerializer(StrictSerializer):
    """Why what is set aside is given back."""

    reason = optional_text(160, "Why.")


class ExtendSerializer(StrictSerializer):
    """Until when it stays set aside."""

    expires_on = DayField(help_text="The new last day, at most 92 days from today.")


class MinimumSerializer(StrictSerializer):
    """The minimum of a substance: an amount, or none."""

    mass_mg = mass_field("Mass", lowest="0")
    volume_ml = volume_field("Volume", "0")
    pieces = pieces_field("Number", "0")
    has_none = serializers.BooleanField(
        required=False, default=False, help_text="true takes the minimum away; give no amount."
    )


def read_minimum(data: Any) -> tuple[str, int | None]:
    """How it is measured and the amount in base units; None takes the minimum away."""
    values = MinimumSerializer(data=data).read()
    if values["has_none"] and read_asked(values, needed=False) is None:
        return "", None
    asked = one_asked(values)
    return asked.measured_by, base_units(asked)


class QuotaSerializer(StrictSerializer):
    """How much a project may claim of a substance in a period."""

    project = text_field(24, "Code of the project.")
    substance = text_field(80, "Code of the substance.")
    starts_on = DayField(help_text="First day of the period.")
    ends_on = DayField(help_text="Last day of the period.")
    mass_mg = mass_field("At most this mass", lowest="0")
    volume_ml = volume_field("At most this volume", "0")
    pieces = pieces_field("At most so many", "0")
    reason = optional_text(160, "Why.")


def read_quota(data: Any) -> tuple[str, QuotaOrder]:
    """Project code and order."""
    values = QuotaSerializer(data=data).read()
    asked = one_asked(values)
    return values["project"], QuotaOrder(
        values["substance"], values["starts_on"], values["ends_on"], asked.measured_by,
        base_units(asked), values.get("reason", ""),
    )  # fmt: skip
