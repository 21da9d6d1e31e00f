"""Constraints that hold on both databases."""

from django.db import models
from django.db.models import F, Q
from django.db.models.functions import Length


class IsWholeNumber(models.Func):
    """True for an integer. SQLite keeps 'abc' or 0.5 in an integer column unless it is asked."""

    function = "TYPEOF"
    output_field = models.BooleanField()
    conditional = True

    def as_sql(self, compiler, connection, **extra):  # type: ignore[no-untyped-def]
        inner, params = compiler.compile(self.source_expressions[0])
        return f"({inner} = {inner})", [*params, *params]

    def as_sqlite(self, compiler, connection, **extra):  # type: ignore[no-untyped-def]
        inner, params = compiler.compile(self.source_expressions[0])
        return f"(typeof({inner}) IN ('integer', 'null'))", params


def whole_from(field: str, lowest: int, *, name: str) -> models.CheckConstraint:
    """An integer that is not below `lowest`."""
    condition = Q(IsWholeNumber(F(field))) & Q(**{f"{field}__gte": lowest})
    return models.CheckConstraint(condition=condition, name=name)


def digest_long(field: str, *, name: str) -> models.CheckConstraint:
    """As long as a SHA-256 in hexadecimal."""
    return models.CheckConstraint(condition=models.lookups.Exact(Length(field), 64), name=name)
