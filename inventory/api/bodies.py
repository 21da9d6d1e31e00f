"""Building blocks of request bodies: amounts, texts, lists of lines."""

from collections.abc import Iterator
from typing import Any

from drf_spectacular.utils import extend_schema_field
from rest_framework import serializers

from inventory.quantities import AMOUNT_FIELDS, Asked
from labplan.base.errors import FieldProblem, InvalidValue, MalformedRequest, UnknownField
from labplan.base.fields import QuantityField, StrictSerializer

MOST_LINES = 200
AMOUNTS = tuple(AMOUNT_FIELDS)


def mass_field(what: str, **more: Any) -> QuantityField:
    return QuantityField(
        lowest=more.pop("lowest", "0.001"), highest="1000000000000", places=3,
        smallest="1 microgram", required=False, help_text=f"{what} [mg].", **more,
    )  # fmt: skip


def volume_field(what: str, lowest: str) -> QuantityField:
    return QuantityField(
        lowest=lowest, highest="1000000000", places=6, smallest="1 nanolitre", required=False,
        help_text=f"{what} [mL].",
    )  # fmt: skip


def pieces_field(what: str, lowest: str) -> QuantityField:
    return QuantityField(
        lowest=lowest, highest="1000000000", places=0, smallest="1 piece", required=False,
        help_text=f"{what}, of what is counted.",
    )  # fmt: skip


def text_field(longest: int, what: str, **more: Any) -> serializers.CharField:
    return serializers.CharField(max_length=longest, help_text=what, **more)


def optional_text(longest: int, what: str) -> serializers.CharField:
    return text_field(longest, what, required=False, allow_blank=True)


@extend_schema_field({"type": "string", "format": "date", "examples": ["2026-12-01"]})
class DayField(serializers.DateField):
    """A day as YYYY-MM-DD."""


def booked_on_field() -> DayField:
    return DayField(
        required=False, help_text="The day it was done; left out, today. Never in the future."
    )


class LinesSerializer(StrictSerializer):
    """A body with a list `lines`; what is wrong in a line is named `lines[0].mass_mg`."""

    def read(self) -> dict[str, Any]:
        data = self.initial_data
        lines = data.get("lines") if isinstance(data, dict) else None
        if isinstance(lines, list):
            known = set(self.fields["lines"].child.fields)
            for number, line in enumerate(lines):
                _refuse_unknown(line, known, f"lines[{number}]")
        return super().read()

    @property
    def errors(self) -> dict[str, Any]:
        return dict(_flat("", super().errors))


def _refuse_unknown(line: Any, known: set[str], where: str) -> None:
    if not isinstance(line, dict):
        raise MalformedRequest(f"{where} must be an object with named fields.")
    unknown = sorted(set(line) - known)
    if unknown:
        raise UnknownField(
            f"Not known in {where}: {', '.join(unknown)}. "
            f"The fields are: {', '.join(sorted(known))}.",
            errors=tuple(
                FieldProblem(f"{where}.{name}", "unknown_field", "Remove it or correct its name.")
                for name in unknown
            ),
        )


def _flat(name: str, errors: Any) -> Iterator[tuple[str, Any]]:
    """Nested errors of the framework as (field, details)."""
    if isinstance(errors, dict):
        for key, inner in errors.items():
            if isinstance(key, int):
                own = f"{name}[{key}]"
            else:
                own = name if key == "non_field_errors" and name else f"{name}.{key}".lstrip(".")
            yield from _flat(own, inner)
    else:
        yield name, errors


class AmountSerializer(StrictSerializer):
    mass_mg = mass_field("Mass")
    volume_ml = volume_field("Volume", "0.000001")
    pieces = pieces_field("Number", "1")


def read_asked(
    values: dict[str, Any], where: str = "", *, also: tuple[str, ...] = (), needed: bool = True
) -> Asked | None:
    """The one amount that is given; two, or none where one is needed, are refused."""
    names = (*AMOUNTS, *also)
    given = [name for name in names if values.get(name) is not None]
    if len(given) == 1:
        return Asked(given[0], values[given[0]])
    if not given and not needed:
        return None
    detail = f"Give exactly one of: {', '.join(names)}."
    prefix = f"{where}." if where else ""
    raise InvalidValue(
        detail,
        errors=tuple(
            FieldProblem(f"{prefix}{name}", "exactly_one_amount", detail) for name in names
        ),
    )


def one_asked(values: dict[str, Any], where: str = "", *, also: tuple[str, ...] = ()) -> Asked:
    """The amount that has to be given."""
    asked = read_asked(values, where, also=also)
    assert asked is not None
    return asked


def base_units(asked: Asked) -> int:
    return int(asked.value * AMOUNT_FIELDS[asked.field][2])


class EmptySerializer(StrictSerializer):
    """Nothing needs to be said: no body, or an empty object."""
