"""Two databases that hold the same have the same digest; any other value has another."""

from datetime import UTC, date, datetime, timedelta, timezone
from decimal import Decimal
from uuid import UUID

import pytest

from labplan.operations.tables import Digest, value_bytes

BERLIN = timezone(timedelta(hours=1))
DIFFERENT = [
    None, "", "None", "1", 1, True, Decimal("1"), Decimal("1.0"), 1.0, b"1", b"", 0, False,
    "2026-12-01", date(2026, 12, 1), datetime(2026, 12, 1, tzinfo=UTC),
    datetime(2026, 12, 1, 0, 0, 0, 1, tzinfo=UTC), UUID(int=1), str(UUID(int=1)), {}, [], {"a": 1},
]  # fmt: skip


def test_values_that_differ_never_look_the_same() -> None:
    assert len({value_bytes(value) for value in DIFFERENT}) == len(DIFFERENT)


def test_one_value_in_two_forms_looks_the_same() -> None:
    noon = datetime(2026, 12, 1, 12, tzinfo=UTC)
    assert value_bytes(noon) == value_bytes(noon.astimezone(BERLIN))
    assert value_bytes(b"\x00\xff") == value_bytes(memoryview(b"\x00\xff"))
    assert value_bytes({"a": 1, "b": 2}) == value_bytes({"b": 2, "a": 1})


def test_an_unknown_type_is_not_compared_by_guess() -> None:
    with pytest.raises(TypeError, match="complex cannot be compared"):
        value_bytes(1j)


def _digest(*rows: tuple[object, ...]) -> Digest:
    digest = Digest()
    for row in rows:
        digest.add(row)
    return digest


def test_the_order_of_rows_does_not_count_but_their_number_and_borders_do() -> None:
    assert _digest((1, "a"), (2, "b")) == _digest((2, "b"), (1, "a"))
    assert _digest((1, "a")) != _digest((1, "a"), (1, "a"))
    assert _digest(("ab", "c")) != _digest(("a", "bc"))
    assert _digest((1, "a"), (2, "b")) != _digest((1, "b"), (2, "a"))
