"""What the bodies about bottles have to say."""

from decimal import Decimal
from typing import Any

from rest_framework import serializers

from inventory.api.bodies import (
    AMOUNTS,
    AmountSerializer,
    DayField,
    LinesSerializer,
    booked_on_field,
    mass_field,
    one_asked,
    optional_text,
    pieces_field,
    read_asked,
    text_field,
    volume_field,
)
from inventory.models import Bottle, Form, Reading
from inventory.services import Count, DecantOrder, MovementOrder, Preparation, ReadingOrder
from inventory.services.bottles import OPERATIONS
from inventory.services.csv_rows import Row, RowErrors
from inventory.services.stock_row import read_code, read_form, read_stabiliser
from inventory.services.substances import SubstanceFinder
from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.fields import QuantityField, StrictSerializer


class MovementOrderSerializer(AmountSerializer):
    """What has happened to a bottle."""

    kind = serializers.ChoiceField(choices=sorted(OPERATIONS), help_text="What happened.")
    project = text_field(
        24, "Code of the project charged; needed for use and return.", required=False
    )
    place = text_field(24, "Where it stands now; needed for a transfer.", required=False)
    is_broken = serializers.BooleanField(
        required=False, default=False, help_text="With loss: the bottle itself is gone."
    )
    reason = optional_text(160, "Why.")
    booked_on = booked_on_field()


def read_movement(data: Any) -> tuple[str, MovementOrder]:
    """Project code (may be empty) and order."""
    values = MovementOrderSerializer(data=data).read()
    kind, project = values["kind"], values.get("project", "")
    takes_all = kind in ("disposal", "transfer") or values["is_broken"]
    asked = read_asked(values, needed=not takes_all)
    for name, needed in (("project", kind in ("use", "return")), ("place", kind == "transfer")):
        if needed and not values.get(name):
            detail = f"A {kind} needs the {name}."
            raise InvalidValue(detail, errors=(FieldProblem(name, "missing", detail),))
    if values["is_broken"] and kind != "loss":
        detail = "Only a loss can say that the bottle is broken."
        raise InvalidValue(detail, errors=(FieldProblem("is_broken", "only_a_loss", detail),))
    return project, MovementOrder(
        kind, asked, values.get("reason", ""), values.get("place", ""), values["is_broken"],
        values.get("booked_on"),
    )  # fmt: skip


class StatusSerializer(StrictSerializer):
    """Whether a bottle may be used."""

    status = serializers.ChoiceField(
        choices=[Bottle.Status.USABLE.value, Bottle.Status.QUARANTINED.value],
        help_text="quarantined sets it aside from use and cancels its holds.",
    )
    reason = text_field(160, "Why.")


class ReadingSerializer(StrictSerializer):
    """A measurement on a bottle."""

    kind = serializers.ChoiceField(choices=Reading.Kind.values, help_text="What was measured.")
    value = QuantityField(
        lowest="0", highest="100000000", places=4, smallest="0.0001",
        help_text="The value in the unit that the kind names.",
    )  # fmt: skip
    read_on = DayField(help_text="The day of the measurement.")
    method = optional_text(60, "How it was measured.")
    has_failed = serializers.BooleanField(
        required=False, default=False,
        help_text="The bottle has failed the test: it is quarantined, its holds are cancelled.",
    )  # fmt: skip


def read_reading(data: Any) -> ReadingOrder:
    values = ReadingSerializer(data=data).read()
    return ReadingOrder(
        values["kind"], values["value"], values["read_on"], values.get("method", ""),
        values["has_failed"],
    )  # fmt: skip


class DecantSerializer(AmountSerializer):
    """A new bottle filled from this one; with `preparation`, what was made of it in the house."""

    code = text_field(24, "Code of the new bottle.")
    place = text_field(24, "Where the new bottle stands.")
    project = text_field(24, "Code of the project it is for, if any.", required=False)
    tare_mg = mass_field("The new bottle empty, with its cap")
    expires_on = DayField(
        required=False, help_text="Left out, the day of the bottle it is filled from."
    )
    reason = optional_text(120, "Why.")
    booked_on = booked_on_field()
    preparation = text_field(
        120, "What was done to it, such as dried over 3A sieves.", required=False
    )
    form = serializers.ChoiceField(
        choices=Form.Kind.values, required=False, help_text="Of a preparation: how it comes now."
    )
    hydrate_water = optional_text(12, "Of a hydrate: moles of water a mole.")
    solution_basis = serializers.ChoiceField(
        choices=Form.SolutionBasis.values, required=False, help_text="Of a solution: strength in."
    )
    solution_value = optional_text(12, "Of a solution: its strength.")
    solution_solvent = optional_text(200, "Of a solution: what it is in.")
    active_share_pct = optional_text(12, "Of a mix of anomers: the share that reacts [%].")
    stabiliser = optional_text(60, "Of a preparation: name of the stabiliser, none or unknown.")
    stabiliser_amount_pct = optional_text(12, "How much of it [%].")
    stabiliser_basis = serializers.ChoiceField(
        choices=["w/w", "v/v"], required=False, help_text="What that is a share of."
    )
    water_ppm = QuantityField(
        lowest="0", highest="1000000", places=4, smallest="0.0001 ppm", required=False,
        allow_null=True,
        help_text="Of a preparation: water by mass [ppm]; null says that it was not measured.",
    )  # fmt: skip
    assay_pct = QuantityField(
        lowest="0.0001", highest="100", places=4, smallest="0.0001 %", required=False,
        help_text="Of a preparation: its assay [%].",
    )  # fmt: skip
    density_g_per_ml = QuantityField(
        lowest="0.1", highest="25", places=4, smallest="0.0001 g/mL", required=False,
        help_text="Of a preparation: its density [g/mL].",
    )  # fmt: skip


_PREPARATION_FIELDS = (
    "form", "hydrate_water", "solution_basis", "solution_value", "solution_solvent",
    "active_share_pct", "stabiliser", "stabiliser_amount_pct", "stabiliser_basis", "water_ppm",
    "assay_pct", "density_g_per_ml",
)  # fmt: skip


def read_decant(data: Any) -> tuple[str, DecantOrder]:
    """Project code (may be empty) and order."""
    values = DecantSerializer(data=data).read()
    errors = RowErrors()
    read_code(Row(None, {"code": values["code"]}, errors))
    errors.refuse()
    tare = values.get("tare_mg")
    return values.get("project", ""), DecantOrder(
        values["code"], one_asked(values), values["place"], values.get("reason", ""),
        int(tare * 1000) if tare is not None else None, values.get("expires_on"),
        _preparation(values), values.get("booked_on"),
    )  # fmt: skip


def _preparation(values: dict[str, Any]) -> Preparation | None:
    if "preparation" not in values:
        given = [name for name in _PREPARATION_FIELDS if name in values]
        if given:
            detail = "Name the preparation; what is only decanted stays what it is."
            raise InvalidValue(
                detail,
                errors=tuple(FieldProblem(n, "needs_preparation", detail) for n in given),
            )
        return None
    missing = [name for name in ("form", "stabiliser", "water_ppm") if name not in values]
    if missing:
        detail = "Say anew of a preparation: form, stabiliser, water_ppm (null: not measured)."
        raise InvalidValue(
            detail, errors=tuple(FieldProblem(name, "missing", detail) for name in missing)
        )
    errors = RowErrors()
    texts = {name: str(values.get(name) or "") for name in _PREPARATION_FIELDS}
    row = Row(None, texts, errors)
    form, stabiliser = read_form(row, SubstanceFinder()), read_stabiliser(row)
    errors.refuse()
    fields = {n: values[n] for n in ("assay_pct", "density_g_per_ml") if n in values}
    return Preparation(values["preparation"], form, stabiliser, values["water_ppm"], fields)


class CountSerializer(StrictSerializer):
    """What one bottle weighs, or what is in it."""

    bottle = text_field(24, "Code of the bottle.")
    gross_mg = mass_field("The bottle with its content and cap")
    tare_mg = mass_field("The bottle empty, where it was weighed; kept for the next time")
    mass_mg = mass_field("The content, of what is weighed", lowest="0")
    volume_ml = volume_field("The content, of what is measured", "0")
    pieces = pieces_field("The content", "0")
    uncertainty_mg = mass_field("A smaller difference is none; left out, 20 mg", lowest="0")
    note = optional_text(160, "Anything to be said about it.")


class CountsSerializer(LinesSerializer):
    """A stock-take of one bottle or many."""

    lines = CountSerializer(many=True, allow_empty=False, max_length=1000)
    reason = optional_text(160, "Why; left out, stock-take.")
    booked_on = booked_on_field()


def read_counts(data: Any) -> dict[str, Any]:
    values = CountsSerializer(data=data).read()
    return {
        "counts": [_count(line, f"lines[{n}]") for n, line in enumerate(values["lines"])],
        "reason": values.get("reason") or "stock-take",
        "booked_on": values.get("booked_on"),
    }


def _count(values: dict[str, Any], where: str) -> Count:
    content = None
    if "gross_mg" not in values:
        content = read_asked(values, where)
    elif any(name in values for name in AMOUNTS):
        detail = "Give the gross weight or the content, one of them."
        raise InvalidValue(detail, errors=(FieldProblem(where, "exactly_one_amount", detail),))
    return Count(
        values["bottle"], _ug(values.get("gross_mg")), _ug(values.get("tare_mg")), content,
        _ug(values.get("uncertainty_mg")), values.get("note", ""),
    )  # fmt: skip


def _ug(value_mg: Decimal | None) -> int | None:
    return int(value_mg * 1000) if value_mg is not None else None
