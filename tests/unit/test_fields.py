"""QuantityField: what it takes is exact and within bounds; what it refuses, it names."""

from decimal import Decimal
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rest_framework import serializers

from labplan.base.errors import InvalidValue, MalformedRequest, UnknownField
from labplan.base.fields import QuantityField, StrictSerializer

LOWEST, HIGHEST, PLACES = Decimal("0.001"), Decimal("1000"), 6
CODES = {"not_a_number", "out_of_range", "too_many_digits"}


def field() -> QuantityField:
    made = QuantityField(lowest="0.001", highest="1000", places=PLACES, smallest="1 microgram")
    made.field_name = "mass_g"
    return made


def refusal(data: Any) -> str:
    with pytest.raises(serializers.ValidationError) as caught:
        field().to_internal_value(data)
    (detail,) = caught.value.detail
    return str(detail.code)


micrograms = st.integers(min_value=1_000, max_value=1_000_000_000)


@settings(deadline=None)
@given(micrograms)
def test_every_whole_number_of_micrograms_in_bounds_is_read_exactly(amount: int) -> None:
    value = Decimal(amount).scaleb(-PLACES)
    for written in (value, f"{value:f}", f"  {value:f} ", f"{value:e}", f"+{value:f}"):
        assert field().to_internal_value(written) == value


@settings(deadline=None)
@given(micrograms)
def test_what_is_shown_is_read_back_as_the_same(amount: int) -> None:
    value = Decimal(amount).scaleb(-PLACES)
    shown = field().to_representation(value)
    assert "e" not in shown.lower()
    assert field().to_internal_value(shown) == value


@settings(deadline=None)
@given(st.integers(min_value=1, max_value=1000))
def test_a_whole_number_of_grams_may_be_a_json_integer(grams: int) -> None:
    assert field().to_internal_value(grams) == grams


@settings(deadline=None)
@given(micrograms, st.integers(min_value=1, max_value=9), st.integers(1, 10))
def test_a_digit_below_the_smallest_unit_is_refused_not_rounded(
    amount: int, digit: int, more: int
) -> None:
    value = Decimal(amount).scaleb(-PLACES) + Decimal(digit).scaleb(-PLACES - more)
    wanted = "too_many_digits" if value <= HIGHEST else "out_of_range"
    assert refusal(value) == wanted
    assert refusal(f"{value:f}") == wanted


def read_or_code(data: Any) -> Decimal | str:
    """The value that is read, or the code of the refusal."""
    try:
        return field().to_internal_value(data)
    except serializers.ValidationError as refused:
        return str(refused.detail[0].code)


@settings(deadline=None)
@given(st.decimals(allow_nan=False, allow_infinity=False))
def test_any_decimal_is_read_exactly_or_refused_for_the_right_reason(value: Decimal) -> None:
    found = read_or_code(value)
    if not LOWEST <= value <= HIGHEST or len(str(value)) > 40:
        assert found == "out_of_range"
    elif value.as_tuple().exponent < -PLACES:
        assert found == "too_many_digits"
    else:
        assert found == value


@settings(deadline=None)
@given(st.text() | st.from_regex(r"[-+ .0-9eE_]{1,12}", fullmatch=True))
def test_any_text_is_an_ascii_decimal_or_refused(text: str) -> None:
    found = read_or_code(text)
    if isinstance(found, str):
        assert found in CODES
    else:
        assert found == Decimal(text.strip())
        assert set(text.strip()) <= set("0123456789.eE+-")


@settings(deadline=None)
@given(st.integers(min_value=-999_999_999_999, max_value=10**30), st.integers(0, 10**30))
def test_no_exponent_breaks_it(mantissa: int, exponent: int) -> None:
    for sign in ("", "-"):
        found = read_or_code(f"{mantissa}e{sign}{exponent}")
        assert found in CODES or LOWEST <= Decimal(found) <= HIGHEST


@settings(deadline=None)
@given(
    st.none()
    | st.booleans()
    | st.floats()
    | st.binary()
    | st.lists(st.integers())
    | st.dictionaries(st.text(), st.integers())
)
def test_what_is_neither_number_nor_text_is_no_number(value: Any) -> None:
    assert refusal(value) == "not_a_number"


@pytest.mark.parametrize("value", [Decimal("NaN"), Decimal("sNaN"), Decimal("Infinity"), "-inf"])
def test_what_is_not_finite_is_no_number(value: Any) -> None:
    assert refusal(value) == "not_a_number"


def test_the_bounds_belong_to_it() -> None:
    assert field().to_internal_value("0.001") == LOWEST
    assert field().to_internal_value("1000.000000") == HIGHEST


class Order(StrictSerializer):
    name = serializers.CharField(max_length=5)
    mass_g = QuantityField(lowest="0.001", highest="1000", places=6, smallest="1 ug")


def test_a_strict_serializer_gives_the_values() -> None:
    assert Order(data={"name": "x", "mass_g": "2.5"}).read() == {
        "name": "x",
        "mass_g": Decimal("2.5"),
    }


def test_a_strict_serializer_lists_every_broken_field() -> None:
    with pytest.raises(InvalidValue) as caught:
        Order(data={"name": "too long", "mass_g": True}).read()
    assert [(line.field, line.code) for line in caught.value.errors] == [
        ("name", "max_length"),
        ("mass_g", "not_a_number"),
    ]


def test_a_strict_serializer_lists_every_unknown_field_and_the_known_ones() -> None:
    with pytest.raises(
        UnknownField, match=r"Not known here: a, b\. The fields are: mass_g, name\."
    ):
        Order(data={"b": 1, "a": 2, "name": "x"}).read()


@pytest.mark.parametrize("data", [None, [], "text", 3, True, [{"name": "x"}]])
def test_a_strict_serializer_takes_an_object_only(data: Any) -> None:
    with pytest.raises(MalformedRequest):
        Order(data=data).read()
