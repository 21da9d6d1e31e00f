"""Constraints that hold on both databases."""

from django.db import models
from django.db.models import F, Q

# 1 Gg in micrograms, 1 ML in nanolitres: far above any bottle, far below 64 bits.
LARGEST_AMOUNT = 10**15


class MeasuredBy(models.TextChoices):
    """How an amount is measured, and so its base unit."""

    MASS = "mass"  # micrograms
    VOLUME = "volume"  # nanolitres
    COUNT = "count"  # pieces


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


def whole_number(field: str, *, lowest: int, name: str) -> models.CheckConstraint:
    """An integer between `lowest` and the largest amount."""
    return models.CheckConstraint(
        condition=Q(IsWholeNumber(F(field)))
        & Q(**{f"{field}__gte": lowest, f"{field}__lte": LARGEST_AMOUNT}),
        name=name,
    )


def one_of(field: str, choices: type[models.TextChoices], *, name: str) -> models.CheckConstraint:
    return models.CheckConstraint(condition=Q(**{f"{field}__in": choices.values}), name=name)
