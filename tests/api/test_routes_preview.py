"""`POST /routes/`: what could be made, from the shelf as it is, without touching it."""

from typing import Any

import pytest

from inventory.models import Balance
from labplan.base.models import Event, OutboxMessage, RememberedAnswer
from tests.api import targets
from tests.api.problems import assert_problem, error_codes
from tests.laboratory import PROCEDURES, ROUTES, Laboratory, octyl_order
from tests.targets import OCTYL_GLUCOSIDE


def ask(lab: Laboratory, **changes: Any) -> Any:
    wanted = {"target_smiles": OCTYL_GLUCOSIDE, "product_mass_g": "2.000", **changes}
    body = {name: value for name, value in wanted.items() if value is not None}
    return lab.client().post(ROUTES, body, Idempotency_Key="")


def preview(lab: Laboratory, **changes: Any) -> dict[str, Any]:
    response = ask(lab, **changes)
    assert response.status_code == 200, response.content[:500]
    answer: dict[str, Any] = response.json()
    return answer


def whole_book() -> tuple[Any, ...]:
    rows = Balance.objects.order_by("bottle__code").values_list("bottle__code", "on_hand", "held")
    kinds = (Event, OutboxMessage, RememberedAnswer)
    return (*rows, *(kind.objects.count() for kind in kinds))


def test_the_object_has_the_shape_that_was_agreed(lab: Laboratory) -> None:
    answer = preview(lab)
    assert set(answer) == {
        "target", "verdict", "reasons", "coupling", "routes", "expectations",
    }  # fmt: skip
    assert (answer["verdict"], answer["reasons"]) == ("plannable", [])
    assert {"smiles", "inchikey", "formula", "molar_mass_g_per_mol", "monoisotopic_mass_da"} <= set(
        answer["target"]
    )
    coupling = answer["coupling"]
    assert {"donor", "acceptor", "residue", "anomer", "relation"} <= set(coupling)
    assert (coupling["anomer"], coupling["relation"]) == ("beta", "1,2-trans")
    for part in ("donor", "acceptor"):
        assert {"name", "smiles", "inchikey"} <= set(coupling[part])
    assert set(answer["expectations"]) >= {"ions", "side_products", "anomeric_signal"}
    assert [route["rank"] for route in answer["routes"]] == list(
        range(1, len(answer["routes"]) + 1)
    )
    route = answer["routes"][0]
    assert {
        "rank", "score", "why", "available", "shortages", "stages", "warnings",
    } <= set(route)  # fmt: skip
    assert route["available"] is True
    assert 0 < route["score"] <= 1
    (stage,) = route["stages"]
    assert {
        "kind", "method", "limiting", "charges", "water", "vessel_ml", "expected", "steps",
    } <= set(stage)  # fmt: skip
    assert {"name", "sources"} <= set(stage["method"])
    assert {"yield_pct", "mass_mg"} <= set(stage["expected"])
    for charge in stage["charges"]:
        assert {
            "role", "substance", "equivalents", "amount_mmol", "mass_mg", "volume_ml", "bottle",
        } <= set(charge)  # fmt: skip
        for name in ("equivalents", "amount_mmol", "mass_mg", "volume_ml"):
            assert charge[name] is None or type(charge[name]) in (int, float)


def test_nothing_is_stored_or_held(lab: Laboratory) -> None:
    lab.client()  # makes its token first
    before, book = lab.counts(), whole_book()
    assert preview(lab)["routes"][0]["available"] is True
    preview(lab, target_smiles=targets.ALPHA_OCTYL)
    assert ask(lab, target_smiles="C1CC").status_code == 422
    assert lab.run_outbox() == 0
    assert (lab.counts(), whole_book()) == (before, book)


@pytest.mark.parametrize(
    "scale",
    [
        {"product_mass_g": "2.000"},
        {"product_mass_g": "0.75"},
        {"product_mass_g": None, "acceptor_amount_mmol": "12.5"},
        {"target_smiles": targets.FREE_OCTYL},
    ],
)
def test_the_amounts_are_those_of_a_procedure_on_the_same_shelf(
    scale: dict[str, Any], lab: Laboratory
) -> None:
    seen = preview(lab, **scale)["routes"][0]
    client = lab.client()
    location = client.post(PROCEDURES, octyl_order(**scale))["Location"]
    lab.run_outbox()
    planned = client.get(location).json()["document"]["route"]
    assert len(planned["stages"]) == len(seen["stages"]) > 0

    def as_number(value: Any) -> Any:
        return float(value) if isinstance(value, str) else value

    names = ("equivalents", "amount_mmol", "mass_mg", "volume_ml")
    for stage, other in zip(planned["stages"], seen["stages"], strict=True):
        assert [c["bottle"] for c in stage["charges"]] == [c["bottle"] for c in other["charges"]]
        for charge, same in zip(stage["charges"], other["charges"], strict=True):
            for name in names:
                assert as_number(charge[name]) == same[name], (charge["key"], name)


def test_without_a_scale_it_is_one_millimole_of_acceptor(lab: Laboratory) -> None:
    answer = preview(lab, product_mass_g=None)
    assert answer == preview(lab, product_mass_g=None, acceptor_amount_mmol=1)
    (stage,) = answer["routes"][0]["stages"]
    acceptor = next(c for c in stage["charges"] if c["role"] == "acceptor")
    assert acceptor["amount_mmol"] == pytest.approx(1, rel=0.02)


@pytest.mark.parametrize(
    ("changes", "status", "code", "lines"),
    [
        ({"target_smiles": "C1CC"}, 422, "invalid_value", [("target_smiles", "smiles_unreadable")]),
        ({"target_smiles": "CCO"}, 422, "invalid_value", [("target_smiles", "no_sugar")]),
        ({"target_smiles": None}, 422, "invalid_value", [("target_smiles", "required")]),
        (
            {"acceptor_amount_mmol": 1}, 422, "invalid_value",
            [(f, "exactly_one_scale") for f in ("product_mass_g", "acceptor_amount_mmol")],
        ),
        ({"product_mass_g": 0}, 422, "invalid_value", [("product_mass_g", "out_of_range")]),
        (
            {"product_mass_g": "2.0000001"}, 422, "invalid_value",
            [("product_mass_g", "too_many_digits")],
        ),
        ({"promoter": "a b"}, 422, "invalid_value", [("promoter", "invalid")]),
        ({"project": "LECTIN-07"}, 400, "unknown_field", [("project", "unknown_field")]),
    ],
)  # fmt: skip
def test_a_bad_request_is_refused_like_that_of_a_procedure(
    changes: dict[str, Any], status: int, code: str, lines: list[tuple[str, str]], lab: Laboratory
) -> None:
    body = assert_problem(ask(lab, **changes), status, code)
    assert error_codes(body) == lines
    if "project" not in changes:
        order = assert_problem(lab.client().post(PROCEDURES, octyl_order(**changes)), status, code)
        assert order == body


def test_what_chemistry_forbids_is_an_answer_with_reasons(lab: Laboratory) -> None:
    answer = preview(lab, target_smiles=targets.ALPHA_OCTYL)
    assert (answer["verdict"], answer["routes"]) == ("not_plannable", [])
    assert answer["coupling"]["relation"] == "1,2-cis"
    assert answer["reasons"]
    assert all(len(reason["detail"]) > 30 for reason in answer["reasons"])


def test_what_the_shelf_cannot_meet_says_what_is_short(lab: Laboratory) -> None:
    answer = preview(lab, product_mass_g="400")
    assert answer["verdict"] == "plannable"
    assert answer["routes"]
    for route in answer["routes"]:
        assert (route["available"], route["stages"]) == (False, [])
        assert all(line["needed"] and line["name"] for line in route["shortages"])
        assert route["shortages"]


def test_a_wished_promoter_is_the_only_one_used(lab: Laboratory) -> None:
    free = preview(lab)
    assert len(free["routes"]) > 1
    answer = preview(lab, promoter="indium-tribromide")
    assert len(answer["routes"]) == 1
    (route,) = answer["routes"]
    assert route["method"] != free["routes"][0]["method"]
    assert route["method"] in {other["method"] for other in free["routes"]}
    promoters = {
        charge["substance"]
        for stage in route["stages"]
        for charge in stage["charges"]
        if charge["role"] == "promoter"
    }
    assert promoters == {"indium-tribromide"}


def test_an_unknown_promoter_is_answered_with_those_that_are_known(lab: Laboratory) -> None:
    answer = preview(lab, promoter="pixie-dust")
    assert (answer["verdict"], answer["routes"]) == ("not_plannable", [])
    (reason,) = answer["reasons"]
    assert reason["code"] == "no_such_method"
    assert "indium-tribromide" in reason["detail"]


def test_who_may_only_look_may_look_at_this(lab: Laboratory) -> None:
    body = {"target_smiles": OCTYL_GLUCOSIDE}
    for client in (lab.client("MIRA", scope="read"), lab.stranger()):
        response = client.post(ROUTES, body)
        assert response.status_code == 200
        assert response.json()["verdict"] == "plannable"
