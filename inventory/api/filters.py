"""Values of filters; one that no row can have is refused, never taken for an empty list."""

from datetime import date
from decimal import Decimal

from rest_framework import serializers

from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.fields import QuantityField


def day_of(wanted: dict[str, str], name: str) -> date | None:
    """A filter that is a day; a value that is none is refused."""
    if name not in wanted:
        return None
    try:
        if len(wanted[name]) != len("2026-12-01"):
            raise ValueError
        return date.fromisoformat(wanted[name])
    except ValueError:
        raise _bad(name, "not_a_date", "Write dates as YYYY-MM-DD.") from None


def decimal_of(wanted: dict[str, str], name: str) -> Decimal | None:
    if name not in wanted:
        return None
    field = QuantityField(lowest="0", highest="1000000", places=4, smallest="0.0001")
    try:
        return field.run_validation(wanted[name])
    except serializers.ValidationError as error:
        raise _bad(name, "not_a_number", str(error.detail[0])) from None


def _bad(name: str, code: str, detail: str) -> InvalidValue:
    return InvalidValue(detail, errors=(FieldProblem(name, code, detail),))


def flag_of(wanted: dict[str, str], name: str) -> bool:
    """A filter that is true or false (checked already); left out, it asks for nothing."""
    return wanted.get(name) == "true"
