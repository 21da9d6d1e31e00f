"""Requests that cannot be meant: each answered by a problem, none of them stored."""

import json
from typing import Any

import pytest

from labplan.base.models import OutboxMessage, Project, RememberedAnswer
from tests.api import targets
from tests.api.problems import assert_problem, error_codes
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

SMILES = "target_smiles"
MASS, MMOL = "product_mass_g", "acceptor_amount_mmol"
LONG_CHAIN = targets.glucoside("C" * 200)

# SMILES, code of the error line
BAD_TARGETS = {
    "unreadable": ("this is no structure", "smiles_unreadable"),
    "unclosed ring": ("C1CC", "smiles_unreadable"),
    "impossible valence": ("C(C)(C)(C)(C)C", "smiles_unreadable"),
    "empty": ("", "blank"),
    "only spaces": ("   ", "blank"),
    "no sugar": ("CCCCCCCCO", "no_sugar"),
    "furanoside": ("OC[C@@H]1O[C@@H](OC)[C@H](O)[C@H]1O", "no_sugar"),
    "free sugar": (targets.FREE_SUGAR, "no_glycosidic_bond"),
    "acetate only": (targets.PERACETATE, "no_glycosidic_bond"),
    "undefined anomeric centre": (targets.OPEN_ANOMER, "undefined_anomeric_centre"),
    "undefined centre in the ring": (targets.OPEN_C3, "undefined_sugar_centre"),
    "undefined centre elsewhere": (targets.glucoside("CC(C)CC"), "undefined_centre"),
    "several components": (targets.glucoside(targets.OCTYL) + ".O", "several_components"),
    "two aglycones": (
        targets.glucoside("CCO[C@@H]2O[C@H](C)[C@@H](O)[C@H](O)[C@H]2O"),
        "several_aglycones",
    ),
    "over 200 heavy atoms": (LONG_CHAIN, "too_many_atoms"),
    "over 2000 characters": ("C" * 2001, "smiles_too_long"),
    "over 4000 characters": ("C" * 4001, "max_length"),
    "charged": (targets.glucoside("CC[N+](C)(C)C"), "charged"),
    "isotope": (targets.glucoside("[13CH2]CC"), "isotope"),
    "wildcard": (targets.glucoside("CC*"), "wildcard_atom"),
    "NUL character": ("CC\0O", "null_characters_not_allowed"),
    "lone surrogate": ("CC\ud800O", "surrogate_characters_not_allowed"),
    "a name behind it": (targets.glucoside(targets.OCTYL) + " mine", "smiles_unreadable"),
    "a number": (7, "smiles_unreadable"),
    "true": (True, "invalid"),
    "a list": (["C"], "invalid"),
    "null": (None, "null"),
}

# JSON text of the scale, code of the error line
BAD_SCALES = {
    "zero": ("0", "out_of_range"),
    "zero as text": ('"0.000"', "out_of_range"),
    "minus zero": ("-0.0", "out_of_range"),
    "negative": ("-2", "out_of_range"),
    "a gigagram": ("1e9", "out_of_range"),
    "a gigagram as text": ('"1000000000"', "out_of_range"),
    "just over the most": ('"1000.000001"', "out_of_range"),
    "just under the least": ('"0.000999"', "out_of_range"),
    "NaN as text": ('"NaN"', "not_a_number"),
    "signalling NaN as text": ('"sNaN123"', "not_a_number"),
    "Infinity as text": ('"Infinity"', "not_a_number"),
    "true": ("true", "not_a_number"),
    "a list": ("[]", "not_a_number"),
    "a nested list": ("[[2]]", "not_a_number"),
    "an object": ("{}", "not_a_number"),
    "null": ("null", "null"),
    "empty text": ('""', "not_a_number"),
    "a unit in the text": ('"2 g"', "not_a_number"),
    "a decimal comma": ('"2,5"', "not_a_number"),
    "an underscore": ('"1_0"', "not_a_number"),
    "digits of another script": ('"\\uff12"', "not_a_number"),
    "hexadecimal": ('"0x10"', "not_a_number"),
    "a NUL in the text": ('"2\\u0000"', "not_a_number"),
    "a lone surrogate": ('"\\ud800"', "not_a_number"),
    "too many digits": ('"2.0000001"', "too_many_digits"),
    "too many digits as a number": ("2.0000001", "too_many_digits"),
    "too many noughts": ('"2.0000000"', "too_many_digits"),
    "exponent 999999": ("1e999999", "out_of_range"),
    "exponent -999999": ("1e-999999", "out_of_range"),
    "monster exponent as text": ('"1e999999999999999999999"', "out_of_range"),
    "tiny monster exponent as text": ('"1e-99999999999999999999"', "out_of_range"),
    "zero with a monster exponent": ('"0e999999999999999999"', "out_of_range"),
    "4000 digits": ("1" * 4000, "out_of_range"),
    "4000 digits as text": ('"' + "1" * 4000 + '"', "out_of_range"),
}

BAD_BODIES: dict[str, tuple[bytes, str]] = {
    "a list": (b"[]", "malformed_request"),
    "null": (b"null", "malformed_request"),
    "a string": (b'"order"', "malformed_request"),
    "a number": (b"2", "malformed_request"),
    "cut off": (b'{"project": "LECTIN-07"', "malformed_request"),
    "two values": (b"{} {}", "malformed_request"),
    "single quotes": (b"{'project': 'LECTIN-07'}", "malformed_request"),
    "a key twice": (b'{"project": "LECTIN-07", "project": "GLYCAN-12"}', "malformed_request"),
    "NaN": (b'{"product_mass_g": NaN}', "malformed_request"),
    "minus Infinity": (b'{"product_mass_g": -Infinity}', "malformed_request"),
    "a monster exponent": (b'{"product_mass_g": 1e99999999999999999999}', "malformed_request"),
    "a tiny monster": (b'{"product_mass_g": 1e-99999999999999999999}', "malformed_request"),
    "5000 digits": (b'{"product_mass_g": ' + b"9" * 5000 + b"}", "malformed_request"),
    "not UTF-8": (b'{"project": "\xff\xfe"}', "malformed_request"),
    "UTF-16": ('{"project": "LECTIN-07"}'.encode("utf-16"), "malformed_request"),
    "a byte order mark": (b"\xef\xbb\xbf{}", "malformed_request"),
    "deep lists": (b"[" * 100_000 + b"]" * 100_000, "malformed_request"),
    "deep objects": (b'{"a":' * 100_000 + b"1" + b"}" * 100_000, "malformed_request"),
    "a nest just read": (b'{"a":' * 500 + b"1" + b"}" * 500, "unknown_field"),
    "a surrogate as a name": (b'{"\\ud800": 1}', "malformed_request"),
    "a NUL as a name": (b'{"\\u0000": 1}', "unknown_field"),
}


@pytest.fixture
def nothing_is_stored(lab: Laboratory) -> Any:
    """Count before and after: no procedure, hold, movement, message or remembered key."""
    before = (*lab.counts(), OutboxMessage.objects.count(), RememberedAnswer.objects.count())
    yield
    after = (*lab.counts(), OutboxMessage.objects.count(), RememberedAnswer.objects.count())
    assert after == before


def order_text(**literals: str) -> bytes:
    """The usual order with fields replaced by JSON text as it stands."""
    parts = {name: json.dumps(value) for name, value in octyl_order().items()} | literals
    return ("{" + ", ".join(f'"{name}": {text}' for name, text in parts.items()) + "}").encode()


@pytest.mark.parametrize("name", BAD_TARGETS)
def test_a_structure_that_is_no_defined_glycoside_is_refused(
    name: str, lab: Laboratory, nothing_is_stored: None
) -> None:
    smiles, code = BAD_TARGETS[name]
    response = lab.client().post_raw(PROCEDURES, order_text(target_smiles=json.dumps(smiles)))
    body = assert_problem(response, 422, "invalid_value")
    assert error_codes(body) == [(SMILES, code)]


@pytest.mark.parametrize("name", BAD_SCALES)
def test_a_scale_that_is_no_amount_is_refused(
    name: str, lab: Laboratory, nothing_is_stored: None
) -> None:
    literal, code = BAD_SCALES[name]
    response = lab.client().post_raw(PROCEDURES, order_text(product_mass_g=literal))
    assert error_codes(assert_problem(response, 422, "invalid_value")) == [(MASS, code)]


def test_an_amount_of_acceptor_is_read_as_strictly_as_a_mass(
    lab: Laboratory, nothing_is_stored: None
) -> None:
    cases = {**BAD_SCALES, "just over the most": ('"10000.000001"', "out_of_range")}
    client, order = lab.client(), order_text(acceptor_amount_mmol="SCALE")
    order = order.replace(b'"product_mass_g": "2.000", ', b"")
    for name, (literal, code) in cases.items():
        response = client.post_raw(PROCEDURES, order.replace(b"SCALE", literal.encode()))
        body = assert_problem(response, 422, "invalid_value")
        assert (name, error_codes(body)) == (name, [(MMOL, code)])


@pytest.mark.parametrize("name", BAD_BODIES)
def test_a_body_that_cannot_be_read_is_refused(
    name: str, lab: Laboratory, nothing_is_stored: None
) -> None:
    raw, code = BAD_BODIES[name]
    assert_problem(lab.client().post_raw(PROCEDURES, raw), 400, code)


@pytest.mark.parametrize(
    ("changes", "lines"),
    [
        ({MMOL: "5"}, [(MASS, "exactly_one_scale"), (MMOL, "exactly_one_scale")]),
        ({MASS: None}, [(MASS, "exactly_one_scale"), (MMOL, "exactly_one_scale")]),
        ({"project": None}, [("project", "required")]),
        ({SMILES: None}, [(SMILES, "required")]),
        ({"project": None, SMILES: None}, [("project", "required"), (SMILES, "required")]),
        ({"project": "NO-SUCH-1"}, [("project", "unknown_project")]),
        ({"project": "GLYCAN-12"}, [("project", "unknown_project")]),
        ({"project": "lectin-07"}, [("project", "unknown_project")]),
        ({"project": ""}, [("project", "blank")]),
        ({"project": "x" * 25}, [("project", "max_length")]),
        ({"project": "x" * 100_000}, [("project", "max_length")]),
        ({"project": "LECTIN\0-07"}, [("project", "null_characters_not_allowed")]),
        ({"project": "\ud800"}, [("project", "surrogate_characters_not_allowed")]),
        ({"project": 12}, [("project", "unknown_project")]),
        ({"project": {"code": "LECTIN-07"}}, [("project", "invalid")]),
        ({"project": "x" * 25, SMILES: "", MASS: "0"},
         [("project", "max_length"), (SMILES, "blank"), (MASS, "out_of_range")]),
    ],
)  # fmt: skip
def test_fields_that_break_a_rule_are_all_named(
    changes: dict[str, Any], lines: list[tuple[str, str]], lab: Laboratory, nothing_is_stored: None
) -> None:
    response = lab.client().post_raw(PROCEDURES, json.dumps(octyl_order(**changes)).encode())
    body = assert_problem(response, 422, "invalid_value")
    assert sorted(error_codes(body)) == sorted(lines)


def test_an_empty_body_names_what_is_needed(lab: Laboratory, nothing_is_stored: None) -> None:
    body = assert_problem(lab.client().post_raw(PROCEDURES, b""), 422, "invalid_value")
    assert sorted(error_codes(body)) == [("project", "required"), (SMILES, "required")]


def test_an_unknown_field_is_named_and_the_known_ones_are_listed(
    lab: Laboratory, nothing_is_stored: None
) -> None:
    response = lab.client().post(PROCEDURES, octyl_order(product_mass_mg="2000", notes="soon"))
    body = assert_problem(response, 400, "unknown_field")
    assert error_codes(body) == [
        ("notes", "unknown_field"),
        ("product_mass_mg", "unknown_field"),
    ]
    known = "acceptor_amount_mmol, product_mass_g, project, promoter, solvent, target_smiles"
    assert known in body["detail"]


@pytest.mark.parametrize("field", ["promoter", "solvent"])
@pytest.mark.parametrize(
    ("value", "code"),
    [
        ("", "blank"), ("two words", "invalid"), ("x" * 81, "max_length"), ("tol\0uene", "invalid"),
        ("tol\ud800uene", "surrogate_characters_not_allowed"), (["toluene"], "invalid"),
        (True, "invalid"), ("tolu\u00e8ne", "invalid"), ("../toluene", "invalid"),
    ],
)  # fmt: skip
def test_a_wish_that_is_no_code_is_refused(
    field: str, value: object, code: str, lab: Laboratory, nothing_is_stored: None
) -> None:
    raw = json.dumps(octyl_order(**{field: value})).encode()
    body = assert_problem(lab.client().post_raw(PROCEDURES, raw), 422, "invalid_value")
    assert (field, code) in error_codes(body)
    assert {name for name, _ in error_codes(body)} == {field}


def test_another_persons_project_is_answered_like_one_that_is_not_there(
    lab: Laboratory, nothing_is_stored: None
) -> None:
    client = lab.client("MIRA")
    other = client.post(PROCEDURES, octyl_order(project="GLYCAN-12")).json()
    absent = client.post(PROCEDURES, octyl_order(project="GLYCAN-99")).json()
    assert json.dumps(other).replace("GLYCAN-12", "GLYCAN-99") == json.dumps(absent)


def test_a_closed_project_takes_no_order(lab: Laboratory, nothing_is_stored: None) -> None:
    Project.objects.filter(code="LECTIN-07").update(is_open=False)
    body = assert_problem(lab.client().post(PROCEDURES, octyl_order()), 403, "not_allowed")
    assert "LECTIN-07 is closed" in body["detail"]


@pytest.mark.parametrize(
    "content_type", ["text/plain", "application/x-www-form-urlencoded", "application/xml"]
)
def test_another_content_type_is_refused(
    content_type: str, lab: Laboratory, nothing_is_stored: None
) -> None:
    response = lab.client().post_raw(PROCEDURES, b"project=LECTIN-07", content_type)
    body = assert_problem(response, 415, "unsupported_media_type")
    assert content_type in body["detail"]
    assert "application/json" in body["detail"]


@pytest.mark.parametrize("size", [1_000_001, 3_000_000])
def test_a_huge_body_is_not_read(size: int, lab: Laboratory, nothing_is_stored: None) -> None:
    raw = order_text(target_smiles='"' + "C" * size + '"')
    assert_problem(lab.client().post_raw(PROCEDURES, raw), 413, "too_large")


def test_a_body_of_the_size_allowed_is_read(lab: Laboratory, nothing_is_stored: None) -> None:
    raw = order_text()
    body = assert_problem(
        lab.client().post_raw(PROCEDURES, raw + b" " * (1_000_000 - len(raw) - 1) + b"x"),
        400,
        "malformed_request",
    )
    assert "Extra data" in body["detail"]


@pytest.mark.parametrize(
    ("literal", "grams"),
    [("2", "2"), ('"2.000"', "2"), ('" 2.5 "', "2.5"), ("1e3", "1000"), ('"0.001"', "0.001"),
     ('"1.000001"', "1.000001")],
)  # fmt: skip
def test_the_same_amount_may_be_written_in_several_ways(
    literal: str, grams: str, lab: Laboratory
) -> None:
    accepted = lab.client().post_raw(PROCEDURES, order_text(product_mass_g=literal))
    assert accepted.status_code == 202
    assert accepted.json()[MASS] == grams
    shown = lab.client().get(accepted["Location"]).json()
    assert (shown[MASS], shown[MMOL]) == (grams, None)
