"""Constraints that hold on both databases."""

from django.db import models
from django.db.models import F, Q

from labplan.base.checks import IsWholeNumber

# 1 Gg in micrograms, 1 ML in nanolitres: far above any bottle, far below 64 bits.
LARGEST_AMOUNT = 10**15


class MeasuredBy(models.TextChoices):
    """How an amount is measured, and so its base unit."""

    MASS = "mass"  # micrograms
    VOLUME = "volume"  # nanolitres
    COUNT = "count"  # pieces


def whole_number(field: str, *, lowest: int, name: str) -> models.CheckConstraint:
    """An integer between `lowest` and the largest amount."""
    return models.CheckConstraint(
        condition=Q(IsWholeNumber(F(field)))
        & Q(**{f"{field}__gte": lowest, f"{field}__lte": LARGEST_AMOUNT}),
        name=name,
    )


def one_of(field: str, choices: type[models.TextChoices], *, name: str) -> models.CheckConstraint:
    return models.CheckConstraint(condition=Q(**{f"{field}__in": choices.values}), name=name)
