"""Serializer building blocks that refuse instead of guessing."""

import re
from collections.abc import Mapping, Sequence
from decimal import Decimal, InvalidOperation
from typing import Any

from rest_framework import serializers

from labplan.base.errors import FieldProblem, InvalidValue, MalformedRequest, UnknownField

# Python would also read "1_0" as ten and digits of any script.
DECIMAL_TEXT = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")


class QuantityField(serializers.Field):
    """An amount: finite, within [lowest, highest], no more decimals than the base unit holds."""

    default_error_messages = {
        "not_a_number": "Give a decimal number, as a JSON number or a string like \"2.000\".",
        "out_of_range": "Give a value from {lowest} to {highest}.",
        "too_many_digits": "Give at most {places} decimals: {unit} is the smallest unit kept.",
    }  # fmt: skip

    def __init__(
        self, *, lowest: str, highest: str, places: int, smallest: str, **kwargs: Any
    ) -> None:
        super().__init__(**kwargs)
        self.lowest, self.highest = Decimal(lowest), Decimal(highest)
        self.places, self.smallest = places, smallest

    def to_internal_value(self, data: Any) -> Decimal:
        if isinstance(data, bool) or not isinstance(data, int | str | Decimal):
            self.fail("not_a_number")
        if len(str(data)) > 40:
            self.fail("out_of_range", lowest=self.lowest, highest=self.highest)
        text = str(data).strip()
        if not DECIMAL_TEXT.fullmatch(text):
            self.fail("not_a_number")
        try:
            value = Decimal(text)
        except InvalidOperation:
            self.fail("out_of_range", lowest=self.lowest, highest=self.highest)
        if not self.lowest <= value <= self.highest:
            self.fail("out_of_range", lowest=self.lowest, highest=self.highest)
        if value.as_tuple().exponent < -self.places:
            self.fail("too_many_digits", places=self.places, unit=self.smallest)
        return value

    def to_representation(self, value: Decimal) -> str:
        return f"{value:f}"


class StrictSerializer(serializers.Serializer):
    """Unknown fields are an error: a typo must not be taken for a default."""

    def read(self) -> dict[str, Any]:
        """Return the checked values; raise MalformedRequest, UnknownField or InvalidValue."""
        if not isinstance(self.initial_data, dict):
            raise MalformedRequest("Send a JSON object with named fields.")
        unknown = sorted(set(self.initial_data) - set(self.fields))
        if unknown:
            known = ", ".join(sorted(self.fields))
            raise UnknownField(
                f"Not known here: {', '.join(unknown)}. The fields are: {known}.",
                errors=tuple(
                    FieldProblem(name, "unknown_field", "Remove it or correct its name.")
                    for name in unknown
                ),
            )
        if not self.is_valid():
            raise InvalidValue("Correct the fields listed in errors.", errors=_lines(self.errors))
        return dict(self.validated_data)


def _lines(errors: Any) -> tuple[FieldProblem, ...]:
    return tuple(
        FieldProblem(field, str(detail.code), str(detail))
        for field, details in errors.items()
        for detail in details
    )


def require_known_parameters(request: Any, known: set[str]) -> None:
    """Refuse a query parameter nobody reads, or one given twice; a typo must not pass."""
    repeated = sorted(n for n in request.query_params if len(request.query_params.getlist(n)) > 1)
    if repeated:
        raise MalformedRequest(f"Given more than once: {', '.join(repeated)}. Give each once.")
    unknown = sorted(set(request.query_params) - known)
    if unknown:
        raise UnknownField(
            f"Not known here: {', '.join(unknown)}. "
            f"This address takes: {', '.join(sorted(known)) or 'no parameters'}.",
            errors=tuple(
                FieldProblem(name, "unknown_parameter", "Remove it or correct its name.")
                for name in unknown
            ),
        )


def require_known_values(wanted: Mapping[str, str], choices: Mapping[str, Sequence[str]]) -> None:
    """Refuse a filter value that no row can have; a typo must not pass for an empty list."""
    lines = tuple(
        FieldProblem(name, "unknown_value", f"{name} is one of: {', '.join(choices[name])}.")
        for name in sorted(choices)
        if name in wanted and wanted[name] not in choices[name]
    )
    if lines:
        raise InvalidValue(" ".join(line.detail for line in lines), errors=lines)
