"""Receiving a bottle over HTTP: the stock file's rules, once for each key, refused in full."""

from decimal import Decimal
from typing import Any

import pytest

from inventory.models import Form, Movement, Substance
from inventory.services.stock_row import STOCK_COLUMNS, STOCK_NEEDED
from labplan.base.models import Event, Membership
from tests.api.openapi import assert_described, faults
from tests.api.problems import assert_problem, error_codes
from tests.db.bench import received_stock
from tests.db.test_import import ROW_ERRORS, SOUND
from tests.laboratory import ApiTestClient, Laboratory

BOTTLES = "/api/v1/bottles/"
RESERVATIONS = "/api/v1/reservations/"
ETHERATE = {
    "code": "BFE-9", "substance": "Boron trifluoride diethyl etherate", "cas": "109-63-7",
    "amount": 100, "unit": "mL", "assay_pct": 46.5, "assay_of": "BF3", "assay_kind": "titration",
    "density_g_per_ml": "1.125", "density_temperature_c": 25, "place": "DB", "lot": "BFE9-26B",
    "received_on": "2026-12-01", "expires_on": "2027-11-30",
}  # fmt: skip
SOLUTION = {
    "code": "BFE-10", "substance": "Boron trifluoride diethyl etherate", "form": "solution",
    "solution_basis": "mol_per_l", "solution_value": "1.0", "solution_solvent": "dichloromethane",
    "density_g_per_ml": "1.29", "amount": "100", "unit": "mL", "place": "DB",
    "received_on": "2026-11-30",
}  # fmt: skip
HYDRATE = {
    "code": "LAC-9", "substance": "Lactose", "cas": "5989-81-1", "form": "hydrate",
    "hydrate_water": 1, "amount": "0.5", "unit": "kg", "assay_pct": "99.0", "assay_of": "hydrate",
    "assay_kind": "against_standard", "place": "S1", "received_on": "2026-12-01",
}  # fmt: skip
SOLVENT = {
    "code": "DCM-9", "substance": "dichloromethane", "amount": "2.50", "unit": "L", "place": "HC",
    "received_on": "2026-11-02", "opened_on": "2026-11-20", "expires_on": "2027-10-31",
    "stabiliser": "amylene", "stabiliser_amount_pct": "0.005", "stabiliser_basis": "w/w",
    "water_ppm": 18.5, "water_read_on": "2026-11-21",
}  # fmt: skip


@pytest.fixture(scope="module")
def document() -> dict[str, Any]:
    served: dict[str, Any] = ApiTestClient(None).get("/api/v1/openapi.json").json()
    return served


def receive(lab: Laboratory, document: dict[str, Any], body: dict[str, Any]) -> dict[str, Any]:
    """As the stock keeper; the answer is as described and as GET shows the bottle."""
    assert faults(document, {"$ref": "#/components/schemas/ReceiptRequest"}, body) == []
    keeper = lab.client("JONAS")
    made = keeper.post(BOTTLES, body)
    assert made.status_code == 201, made.content
    assert_described(document, BOTTLES, "post", made)
    assert made["Location"] == f"{BOTTLES}{body['code']}/"
    looked = keeper.get(made["Location"])
    assert (looked.json(), looked["ETag"]) == (made.json(), made["ETag"])
    shown: dict[str, Any] = made.json()
    return shown


def first_line(code: str) -> Movement:
    """The one line in the book of a new bottle."""
    [line] = Movement.objects.filter(bottle__code=code)
    assert (line.kind, line.seq, line.actor_code) == ("receipt", 1, "JONAS")
    return line


def test_etherate_whose_assay_counts_bf3(lab: Laboratory, document: dict[str, Any]) -> None:
    """100 mL x 1.125 g/mL x 46.5 % / 67.81 g/mol = 0.77146 mol, as for BFE-1."""
    shown = receive(lab, document, ETHERATE)
    assert (shown["substance"], shown["form"]) == ("boron-trifluoride-diethyl-etherate", "neat")
    assert (shown["assay_pct"], shown["assay_of"]) == ("46.5", "BF3")
    assert (shown["on_hand_volume_ml"], shown["usable_volume_ml"]) == ("100", "99.8")
    line = first_line("BFE-9")
    assert (line.entered_amount, line.entered_unit) == ("100", "mL")
    assert line.amount_nmol == pytest.approx(771_460_000, abs=100_000)
    event = Event.objects.get(kind="bottle.received")
    assert (event.actor_code, event.subject) == ("JONAS", "bottle BFE-9")


def test_a_solution_by_its_moles(lab: Laboratory, document: dict[str, Any]) -> None:
    shown = receive(lab, document, SOLUTION)
    assert shown["measured_by"] == "volume"
    form = lab.bottle("BFE-10").form
    assert (form.kind, form.solution_basis, form.solution_value) == ("solution", "mol_per_l", 1)
    assert form.solution_solvent is not None
    assert form.solution_solvent.code == "dichloromethane"
    assert first_line("BFE-10").amount_nmol == 100_000_000  # 0.1 L x 1 mol/L


def test_a_hydrate_joins_the_form_that_is_there(lab: Laboratory, document: dict[str, Any]) -> None:
    """500 g x 99.0 % / 360.312 g/mol = 1.37381 mol."""
    forms = Form.objects.count()
    shown = receive(lab, document, HYDRATE)
    assert lab.bottle("LAC-9").form == lab.bottle("LAC-1").form
    assert Form.objects.count() == forms
    assert (shown["on_hand_mass_mg"], shown["usable_mass_mg"]) == ("500000", "499980")
    assert first_line("LAC-9").amount_nmol == pytest.approx(1_373_810_000, abs=20_000)


def test_a_solvent_with_its_water(lab: Laboratory, document: dict[str, Any]) -> None:
    shown = receive(lab, document, SOLVENT)
    assert (shown["stabiliser"], shown["opened_on"]) == ("amylene", "2026-11-20")
    assert (shown["on_hand_volume_ml"], shown["usable_volume_ml"]) == ("2500", "2450")
    assert first_line("DCM-9").entered_amount == "2.50"
    [water] = lab.client().get(f"{BOTTLES}DCM-9/readings/").json()["results"]
    assert (water["kind"], water["value"], water["read_on"]) == (
        "water_ppm", "18.5", "2026-11-21",
    )  # fmt: skip
    bottle = lab.bottle("DCM-9")
    assert (bottle.stabiliser_amount_pct, bottle.stabiliser_basis) == (Decimal("0.005"), "w/w")


def test_a_new_compound_is_made_from_its_structure(
    lab: Laboratory, document: dict[str, Any]
) -> None:
    body = {
        **SOUND, "code": "NEW-1", "substance": "Dec-9-yn-1-ol", "smiles": "C#CCCCCCCCCO",
        "amount": "1000", "unit": "mg",
    }  # fmt: skip
    shown = receive(lab, document, body)
    made = Substance.objects.get(code=shown["substance"])
    assert (made.kind, made.formula, made.name) == ("defined", "C10H18O", "Dec-9-yn-1-ol")
    assert shown["on_hand_mass_mg"] == "1000"
    again = receive(lab, document, {**body, "code": "NEW-2", "substance": "another name"})
    assert again["substance"] == shown["substance"]


def test_the_bottle_can_be_held_at_once(lab: Laboratory, document: dict[str, Any]) -> None:
    receive(lab, document, SOLVENT)
    order = {
        "project": "LECTIN-07", "purpose": "a test",
        "lines": [{"bottle": "DCM-9", "volume_ml": "2450"}],
    }  # fmt: skip
    held = lab.client("MIRA").post(RESERVATIONS, order)
    assert held.status_code == 201, held.content
    assert lab.client().get(f"{BOTTLES}DCM-9/").json()["usable_volume_ml"] == "0"


def test_one_received_in_quarantine_cannot_be_held(
    lab: Laboratory, document: dict[str, Any]
) -> None:
    assert receive(lab, document, {**SOLVENT, "status": "quarantined"})["status"] == "quarantined"
    order = {"project": "LECTIN-07", "purpose": "p",
             "lines": [{"bottle": "DCM-9", "volume_ml": 1}]}  # fmt: skip
    assert_problem(lab.client("MIRA").post(RESERVATIONS, order), 409, "stock_short")


def test_the_same_key_is_one_bottle(lab: Laboratory, document: dict[str, Any]) -> None:
    keeper = lab.client("JONAS")
    first = keeper.post(BOTTLES, SOLVENT, key="one-bottle-only")
    stored = received_stock()
    again = keeper.post(BOTTLES, SOLVENT, key="one-bottle-only")
    assert_described(document, BOTTLES, "post", again)
    assert (again.status_code, again.content) == (201, first.content)
    assert [again[name] for name in ("Location", "ETag")] == [
        first[name] for name in ("Location", "ETag")
    ]
    assert again["Idempotency-Replayed"] == "true"
    other = keeper.post(BOTTLES, {**SOLVENT, "code": "DCM-8"}, key="one-bottle-only")
    assert_problem(other, 422, "idempotency_key_reused")
    assert_problem(keeper.post(BOTTLES, SOLVENT, Idempotency_Key=""), 400,
                   "idempotency_key_missing")  # fmt: skip
    taken = assert_problem(keeper.post(BOTTLES, SOLVENT), 422, "invalid_value")
    assert error_codes(taken) == [("code", "bottle_exists")]
    assert received_stock() == stored


@pytest.mark.parametrize(("changes", "column", "code"), ROW_ERRORS)
def test_what_the_import_refuses_is_refused_by_its_field(
    changes: dict[str, str], column: str, code: str, lab: Laboratory, document: dict[str, Any]
) -> None:
    if changes == {"code": "A"}:  # a bottle that is there in the import's own test
        changes = {"code": "GPA-1"}
    keeper, before = lab.client("JONAS"), received_stock()
    refused = keeper.post(BOTTLES, {**SOUND, **changes})
    assert error_codes(assert_problem(refused, 422, "invalid_value")) == [(column, code)]
    assert_described(document, BOTTLES, "post", refused)
    assert received_stock() == before


@pytest.mark.parametrize(
    ("changes", "status", "errors"),
    [
        ({"colour": "red"}, 400, [("colour", "unknown_field")]),
        ({"bottle": "T-2"}, 400, [("bottle", "unknown_field")]),
        ({"amount": None}, 422, [("amount", "null")]),
        ({"amount": True}, 422, [("amount", "invalid")]),
        ({"amount": ["1"]}, 422, [("amount", "invalid")]),
        ({"lot": {"of": 1}}, 422, [("lot", "invalid")]),
        ({"lot": "a\0b"}, 422, [("lot", "null_characters_not_allowed")]),
        ({"smiles": "C" * 4001}, 422, [("smiles", "max_length")]),
        ({"place": ...}, 422, [("place", "required")]),
        ({"place": " "}, 422, [("place", "missing")]),
        ({"amount": "1,5", "place": "S9"}, 422,
         [("amount", "decimal_comma"), ("place", "unknown_place")]),
    ],
)  # fmt: skip
def test_a_body_that_is_not_as_meant_changes_nothing(
    changes: dict[str, Any], status: int, errors: list[tuple[str, str]], lab: Laboratory
) -> None:
    body = {name: value for name, value in {**SOUND, **changes}.items() if value is not ...}
    keeper, before = lab.client("JONAS"), received_stock()
    refused = keeper.post(BOTTLES, body)
    code = "invalid_value" if status == 422 else "unknown_field"
    assert error_codes(assert_problem(refused, status, code)) == errors
    assert received_stock() == before


@pytest.mark.parametrize(
    ("number", "taken"),
    [
        (b"2.50", ("2.50", 2_500_000_000)),
        (b"1e0", ("1", 1_000_000_000)),
        (b"1.5E-3", ("0.0015", 1_500_000)),
        (b"0.000000001", ("0.000000001", 1)),
        (b'" 1.0 "', ("1.0", 1_000_000_000)),
        (b"1e400", "too_long"),
        (b"1e-400", "too_long"),
        (b"1." + b"0" * 50, "too_long"),
        (b"1e20", "out_of_range"),
        (b"0.0000000001", "too_many_digits"),
        (b'"1e0"', "not_a_number"),  # a text is what would stand in the file
    ],
)
def test_a_number_is_taken_exactly_as_it_is_written(
    number: bytes, taken: Any, lab: Laboratory
) -> None:
    keeper, before = lab.client("JONAS"), received_stock()
    body = b"{%s}" % b", ".join(
        b'"%s": %s' % (name.encode(), number if name == "amount" else b'"%s"' % value.encode())
        for name, value in SOUND.items()
    )
    answer = keeper.post_raw(BOTTLES, body)
    if isinstance(taken, str):
        problem = assert_problem(answer, 422, "invalid_value")
        assert error_codes(problem) == [("amount", taken)]
        assert received_stock() == before
    else:
        assert answer.status_code == 201, answer.content
        line = first_line(SOUND["code"])
        assert (line.entered_amount, line.on_hand_change) == taken


def test_not_json_is_not_read(lab: Laboratory) -> None:
    keeper, before = lab.client("JONAS"), received_stock()
    for body in (b"[]", b'"T-1"', b"{", b'{"code": "T-1", "code": "T-2"}', b'{"amount": NaN}'):
        assert_problem(keeper.post_raw(BOTTLES, body), 400, "malformed_request")
    assert received_stock() == before


@pytest.mark.parametrize(
    ("role", "may"),
    [("viewer", 0), ("chemist", 0), ("approver", 0), ("lead", 0), ("stock_keeper", 1)],
)
def test_only_who_keeps_the_stock_receives(role: str, may: int, lab: Laboratory) -> None:
    lab.add_member("KIM", role)
    reads, writes = lab.client("KIM", scope="read"), lab.client("KIM")
    before = received_stock()
    assert_problem(reads.post(BOTTLES, SOLVENT), 403, "not_allowed")
    assert received_stock() == before
    answer = writes.post(BOTTLES, SOLVENT)
    if may:
        assert answer.status_code == 201
        assert lab.bottle("DCM-9").balance.on_hand == 2_500_000_000
    else:
        assert_problem(answer, 403, "not_allowed")
        assert received_stock() == before


def test_the_answer_is_only_for_who_may_still_ask(lab: Laboratory) -> None:
    lab.add_member("KIM", "stock_keeper")
    assert lab.client("KIM").post(BOTTLES, SOLVENT, key="kims-own-key").status_code == 201
    Membership.objects.filter(person__code="KIM").delete()
    assert_problem(lab.client("KIM").post(BOTTLES, SOLVENT, key="kims-own-key"), 403, "not_allowed")


def test_the_body_is_described_by_the_columns_of_the_file(document: dict[str, Any]) -> None:
    described = document["components"]["schemas"]["ReceiptRequest"]
    assert tuple(described["properties"]) == STOCK_COLUMNS
    assert set(described["required"]) == STOCK_NEEDED
    for name, schema in described["properties"].items():
        assert len(schema["description"]) > 10, name
