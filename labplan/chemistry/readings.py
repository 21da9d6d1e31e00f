"""How long a measurement on a bottle says something."""

from datetime import date, timedelta

# Common practice: a water reading this old says nothing once the bottle is open.
READING_VALID_AFTER_OPENING_DAYS = 30


def reading_counts(*, read_on: date, opened_on: date | None, as_of: date) -> bool:
    """Whether a water reading still holds: for good while sealed, 30 days once opened.

    >>> reading_counts(read_on=date(2026, 10, 1), opened_on=None, as_of=date(2026, 12, 1))
    True
    >>> reading_counts(
    ...     read_on=date(2026, 10, 1), opened_on=date(2026, 9, 1), as_of=date(2026, 12, 1)
    ... )
    False
    """
    if opened_on is None:
        return True
    return as_of - read_on <= timedelta(days=READING_VALID_AFTER_OPENING_DAYS)
