"""The byte form that is hashed: RFC 8785 with decimals as strings."""

import hashlib
import json
from decimal import Decimal
from typing import Any

import pytest
import rfc8785
from hypothesis import given, settings
from hypothesis import strategies as st

from labplan.base.canonical import canonical_bytes, sha256_hex

plain = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**53) + 1, 2**53 - 1) | st.text(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
    max_leaves=20,
)


def test_decimals_are_plain_strings_with_the_digits_that_are_meant() -> None:
    value = [Decimal("2.000"), Decimal("1E+3"), Decimal("1E-7"), Decimal("0"), Decimal("-0.50")]
    assert canonical_bytes(value) == b'["2.000","1000","0.0000001","0","-0.50"]'


@pytest.mark.parametrize("value", [1.5, 0.0, float("nan"), [1.0], {"a": {"b": (2.0,)}}])
def test_floats_are_refused_wherever_they_stand(value: Any) -> None:
    with pytest.raises(TypeError, match="floats have no place"):
        canonical_bytes(value)


@pytest.mark.parametrize("text", ["NaN", "sNaN", "Infinity", "-Infinity"])
def test_a_decimal_that_is_no_number_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match="has no place"):
        canonical_bytes({"mass_mg": Decimal(text)})


def test_keys_stand_in_the_order_of_their_utf_16_code_units() -> None:
    # U+1F600 is D83D DE00 in UTF-16, so it comes before U+FB33 (RFC 8785, 3.2.3)
    value = {"\ufb33": 1, "\U0001f600": 2, "b": 3, "a": 4, "B": 5, "10": 6, "9": 7, "": 8}
    assert canonical_bytes(value).decode() == (
        '{"":8,"10":6,"9":7,"B":5,"a":4,"b":3,"\U0001f600":2,"\ufb33":1}'
    )


def test_text_is_utf_8_and_only_what_must_be_is_escaped() -> None:
    value = {"name": 'β-D "x" \\ /\n\x01\u2028é'}
    written = '{"name":"β-D \\"x\\" \\\\ /\\n\\u0001\u2028é"}'
    assert canonical_bytes(value) == written.encode()


def test_composed_and_decomposed_letters_are_kept_apart() -> None:
    assert canonical_bytes("\u00e9") != canonical_bytes("e\u0301")


def test_tuples_are_lists_and_there_is_no_space() -> None:
    assert canonical_bytes({"a": (1, [True, None])}) == b'{"a":[1,[true,null]]}'


@settings(deadline=None)
@given(plain)
def test_the_order_in_which_a_dict_was_filled_does_not_count(value: Any) -> None:
    def turned(item: Any) -> Any:
        if isinstance(item, dict):
            return {key: turned(item[key]) for key in reversed(list(item))}
        return [turned(part) for part in item] if isinstance(item, list) else item

    assert canonical_bytes(turned(value)) == canonical_bytes(value)


@settings(deadline=None)
@given(plain)
def test_what_is_read_back_is_the_same_and_gives_the_same_bytes(value: Any) -> None:
    written = canonical_bytes(value)
    assert json.loads(written) == value
    assert canonical_bytes(json.loads(written)) == written


@pytest.mark.parametrize("value", [{1, 2}, object(), b"bytes"])
def test_what_json_does_not_know_is_refused(value: Any) -> None:
    with pytest.raises(rfc8785.CanonicalizationError):
        canonical_bytes(value)


def test_the_hash_is_sha_256() -> None:
    assert sha256_hex(b"abc") == hashlib.sha256(b"abc").hexdigest()
    assert sha256_hex(b"").startswith("e3b0c44298fc1c14")
