"""The description of the API: valid, complete, and true of real answers."""

import copy
import json
import re
from pathlib import Path
from typing import Any

import pytest
import yaml
from openapi_spec_validator import OpenAPIV31SpecValidator

from labplan.base.api.pages import example_of
from labplan.base.login import set_password
from tests.api import targets
from tests.api.openapi import assert_described, faults
from tests.api.url_map import AT_ROOT, DESCRIBED, Planted, plant_procedure, served_patterns
from tests.laboratory import PROCEDURES, ROUTES, ApiTestClient, Laboratory, octyl_order

FILE = Path(__file__).resolve().parents[2] / "docs" / "openapi.yaml"
DESCRIBED_METHODS = {"GET", "POST", "PUT", "PATCH", "DELETE"}
DETAIL, CANCEL = PROCEDURES + "{code}/", PROCEDURES + "{code}/cancel/"


@pytest.fixture(scope="module")
def document() -> dict[str, Any]:
    """As it is served, to anybody."""
    response = ApiTestClient(None).get("/api/v1/openapi.json")
    assert (response.status_code, response["Content-Type"]) == (200, "application/json")
    served: dict[str, Any] = response.json()
    return served


@pytest.fixture
def planted(lab: Laboratory) -> Planted:
    return plant_procedure(lab)


def routes() -> dict[str, str]:
    """Name of each route -> its path as OpenAPI writes it."""
    return {
        pattern.name: "/" + re.sub(r"<(?:\w+:)?(\w+)>", r"{\1}", route)
        for route, pattern in served_patterns()
        if route not in AT_ROOT
    }


def test_the_served_description_is_valid_openapi_3_1(document: dict[str, Any]) -> None:
    assert document["openapi"] == "3.1.0"
    assert [str(error) for error in OpenAPIV31SpecValidator(document).iter_errors()] == []


def test_the_validator_would_find_a_fault(document: dict[str, Any]) -> None:
    spoilt = copy.deepcopy(document)
    del spoilt["paths"][ROUTES]["post"]["responses"]["200"]["description"]
    assert list(OpenAPIV31SpecValidator(spoilt).iter_errors())


def test_the_file_checked_in_is_what_is_served(document: dict[str, Any]) -> None:
    assert yaml.safe_load(FILE.read_text(encoding="utf-8")) == document


def test_every_route_and_method_is_described_and_nothing_else(document: dict[str, Any]) -> None:
    described = {
        (path, method.upper()) for path, methods in document["paths"].items() for method in methods
    }
    served = {
        (routes()[name], method)
        for name, expected in DESCRIBED.items()
        for method in set(expected.methods) & DESCRIBED_METHODS
    }
    assert described == served


def test_every_operation_says_what_it_is_for(document: dict[str, Any]) -> None:
    tags = {tag["name"] for tag in document["tags"]}
    for path, methods in document["paths"].items():
        for method, operation in methods.items():
            where = (path, method)
            assert len(operation["summary"]) > 10, where
            assert len(operation["description"]) > 10, where
            assert set(operation["tags"]) <= tags, where
            assert operation["responses"]["default"] == {"$ref": "#/components/responses/Problem"}
            for parameter in operation.get("parameters", []):
                assert len(parameter["description"]) > 5, (*where, parameter["name"])
            in_path = {p["name"] for p in operation.get("parameters", []) if p["in"] == "path"}
            assert in_path == set(re.findall(r"{(\w+)}", path)), where


def test_only_what_is_public_needs_no_token(document: dict[str, Any]) -> None:
    assert document["components"]["securitySchemes"]["bearer"]["scheme"] == "bearer"
    without = {
        path
        for path, methods in document["paths"].items()
        for operation in methods.values()
        if operation.get("security") != [{"bearer": []}]
    }
    assert without == {routes()[n] for n, e in DESCRIBED.items() if e.sees in ("public", "door")}


def test_filters_pages_and_headers_are_described(document: dict[str, Any]) -> None:
    def parameters(path: str, method: str = "get") -> dict[str, bool]:
        found = document["paths"][path][method]["parameters"]
        return {p["name"]: p.get("required", False) for p in found if p["in"] != "path"}

    assert set(parameters(PROCEDURES)) == {"project", "state", "cursor", "page_size"}
    assert set(parameters("/api/v1/bottles/")) == {
        "substance", "place", "status", "expires_from", "expires_until", "water_ppm_above",
        "under_minimum", "parent", "cursor", "page_size",
    }  # fmt: skip
    assert parameters(PROCEDURES, "post") == {"Idempotency-Key": True}
    assert parameters(CANCEL, "post") == {"Idempotency-Key": True, "If-Match": True}
    assert parameters(DETAIL) == {"If-None-Match": False, "Prefer": False}
    accepted = document["paths"][PROCEDURES]["post"]["responses"]["202"]["headers"]
    assert set(accepted) == {"ETag", "Location", "Retry-After", "Idempotency-Replayed"}


@pytest.mark.parametrize("name", [n for n, e in DESCRIBED.items() if n.endswith("-list")])
def test_a_list_takes_exactly_the_parameters_described(
    name: str, lab: Laboratory, planted: Planted, document: dict[str, Any]
) -> None:
    described = {
        p["name"]
        for p in document["paths"][routes()[name]]["get"]["parameters"]
        if p["in"] == "query"
    }
    refused = lab.client().get(planted.path(name) + "?surely_unknown=1").json()
    taken = refused["detail"].partition("This address takes: ")[2].rstrip(".").split(", ")
    assert set(taken) == described


def test_no_named_schema_is_unused_and_none_is_missing(document: dict[str, Any]) -> None:
    used = set(re.findall(r"#/components/schemas/(\w+)", json.dumps(document)))
    assert used == set(document["components"]["schemas"])


def test_no_object_is_left_open(document: dict[str, Any]) -> None:
    """Each object names its properties, or says of what form the others are."""

    def open_objects(schema: Any, where: str) -> list[str]:
        if isinstance(schema, list):
            return [o for i, item in enumerate(schema) for o in open_objects(item, f"{where}[{i}]")]
        if not isinstance(schema, dict):
            return []
        kinds = schema.get("type", ())
        is_object = kinds == "object" or (isinstance(kinds, list) and "object" in kinds)
        is_open = (
            is_object and not schema.get("properties") and not schema.get("additionalProperties")
        )
        deeper = [o for key, item in schema.items() for o in open_objects(item, f"{where}.{key}")]
        return [where, *deeper] if is_open else deeper

    assert open_objects(document["components"]["schemas"], "") == []


def test_every_get_answers_as_described(
    lab: Laboratory, planted: Planted, document: dict[str, Any]
) -> None:
    for person in ("MIRA", "JONAS"):
        client = lab.client(person)
        for name, expected in DESCRIBED.items():
            if "GET" in expected.methods:
                response = client.get(planted.path(name))
                assert response.status_code == 200
                assert_described(document, routes()[name], "get", response)


def test_every_row_of_the_stock_is_as_described(
    lab: Laboratory, planted: Planted, document: dict[str, Any]
) -> None:
    """All of them: weighed, measured and counted bottles; released and lapsed lines as well."""
    keeper, mira = lab.client("JONAS"), lab.client("MIRA")
    cancelled = mira.post(planted.path("procedure-cancel"), If_Match="*")
    assert cancelled.status_code == 200
    seen = 0
    for kind in ("substances", "bottles", "places", "reservations"):
        response = keeper.get(f"/api/v1/{kind}/?page_size=200")
        assert_described(document, f"/api/v1/{kind}/", "get", response)
        assert response.json()["next"] is None
        seen += len(response.json()["results"])
    assert seen > 130
    bottles = keeper.get("/api/v1/bottles/?page_size=200").json()["results"]
    assert {bottle["measured_by"] for bottle in bottles} >= {"mass", "volume"}
    kinds = set()
    for bottle in bottles:
        path = f"/api/v1/bottles/{bottle['code']}/movements/"
        response = keeper.get(path)
        assert_described(document, "/api/v1/bottles/{code}/movements/", "get", response)
        kinds |= {line["kind"] for line in response.json()["results"]}
    assert kinds == {"receipt", "hold", "release"}


def test_a_procedure_is_as_described_from_its_request_to_its_cancelling(
    lab: Laboratory, document: dict[str, Any]
) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order(), key="the-same-key")
    assert_described(document, PROCEDURES, "post", accepted)
    again = client.post(PROCEDURES, octyl_order(), key="the-same-key")
    assert again["Idempotency-Replayed"] == "true"
    assert_described(document, PROCEDURES, "post", again)
    path = accepted["Location"]
    queued = client.get(path)
    assert queued.json()["document"] is None
    assert_described(document, DETAIL, "get", queued)
    lab.run_outbox()
    planned = client.get(path)
    assert planned.json()["state"] == "planned"
    assert_described(document, DETAIL, "get", planned)
    unchanged = client.get(path, If_None_Match=planned["ETag"])
    assert unchanged.status_code == 304
    assert_described(document, DETAIL, "get", unchanged)
    same = client.get(path + "document/", If_None_Match=client.get(path + "document/")["ETag"])
    assert same.status_code == 304
    assert_described(document, DETAIL + "document/", "get", same)
    cancelled = client.post(path + "cancel/", If_Match=planned["ETag"])
    assert cancelled.status_code == 200
    assert_described(document, CANCEL, "post", cancelled)
    assert_described(document, PROCEDURES, "get", client.get(PROCEDURES))


@pytest.mark.parametrize(
    ("changes", "state"),
    [
        ({"target_smiles": targets.FREE_OCTYL}, "planned"),
        ({"product_mass_g": "400"}, "short"),
        ({"product_mass_g": "0.005"}, "refused"),
        ({"target_smiles": targets.ALPHA_OCTYL}, "refused"),
        ({"promoter": "no-such-promoter"}, "refused"),
        ({"product_mass_g": None, "acceptor_amount_mmol": 3}, "planned"),
    ],
)
def test_however_planning_ends_the_answer_is_as_described(
    changes: dict[str, Any], state: str, lab: Laboratory, document: dict[str, Any]
) -> None:
    client = lab.client()
    path = client.post(PROCEDURES, octyl_order(**changes))["Location"]
    lab.run_outbox()
    settled = client.get(path)
    assert settled.json()["state"] == state
    assert_described(document, DETAIL, "get", settled)
    assert_described(document, DETAIL + "document/", "get", client.get(path + "document/"))
    order = octyl_order(**changes)
    del order["project"]
    preview = client.post(ROUTES, order)
    assert preview.status_code == 200
    assert_described(document, ROUTES, "post", preview)


def test_problems_are_as_described(
    lab: Laboratory, planted: Planted, document: dict[str, Any]
) -> None:
    client, path = lab.client(), planted.path("procedure-detail")
    cancel = path + "cancel/"
    client.post(PROCEDURES, octyl_order(), key="used-already")
    met: list[tuple[str, str, Any]] = [
        (PROCEDURES, "get", ApiTestClient(None).get(PROCEDURES)),
        (PROCEDURES, "get", client.get(PROCEDURES + "?colour=red")),
        (PROCEDURES, "get", client.get(PROCEDURES + "?state=flying")),
        (PROCEDURES, "post", client.post_raw(PROCEDURES, b"{")),
        (PROCEDURES, "post", client.post_raw(PROCEDURES, b"x", "text/plain")),
        (PROCEDURES, "post", client.post(PROCEDURES, {})),
        (PROCEDURES, "post", client.post(PROCEDURES, octyl_order(project="NOT-MINE"))),
        (PROCEDURES, "post", client.post(PROCEDURES, octyl_order(), Idempotency_Key="")),
        (PROCEDURES, "post", client.post(PROCEDURES, octyl_order(product_mass_g="3"),
                                         key="used-already")),
        (ROUTES, "post", client.post(ROUTES, {"target_smiles": "C1CC"})),
        (CANCEL, "post", client.post(cancel)),
        (CANCEL, "post", client.post(cancel, If_Match='"procedure-old"')),
        (DETAIL, "get", client.get(PROCEDURES + "P-22222222/")),
        (CANCEL, "post", lab.client("MIRA", scope="read").post(cancel, If_Match="*")),
    ]  # fmt: skip
    client.post(cancel, If_Match="*")
    met.append((CANCEL, "post", client.post(cancel, If_Match="*")))
    for route, method, response in met:
        assert response.status_code >= 400
        assert_described(document, route, method, response)
    statuses = {response.status_code for _, _, response in met}
    assert statuses == {400, 401, 403, 404, 409, 412, 415, 422, 428}


def test_tokens_and_logins_are_as_described(lab: Laboratory, document: dict[str, Any]) -> None:
    client, tokens, login = lab.client(), "/api/v1/tokens/", "/api/v1/login/"
    set_password(person_code="MIRA", password="a heron on one leg")
    body = {"person": "MIRA", "password": "a heron on one leg"}
    met = [client.post(login, body)]
    met += [client.post(login, {**body, "password": "another"}) for _ in range(6)]
    assert [response.status_code for response in met] == [201, *[401] * 5, 429]
    for response in met:
        assert_described(document, login, "post", response)
    made = client.post(tokens, {"name": "balance"})
    assert_described(document, tokens, "post", made)
    revoked = client.post(f"{tokens}{made.json()['id']}/revoke/")
    assert revoked.status_code == 200
    assert_described(document, tokens + "{token_id}/revoke/", "post", revoked)
    assert_described(document, tokens, "get", client.get(tokens))


def test_a_field_that_is_gone_or_new_is_found(
    lab: Laboratory, planted: Planted, document: dict[str, Any]
) -> None:
    """The check itself: it must not pass what is not described."""
    shown = lab.client().get(planted.path("procedure-detail")).json()
    schema = {"$ref": "#/components/schemas/ProcedureDetail"}
    assert faults(document, schema, shown) == []
    charge = shown["document"]["route"]["stages"][0]["charges"][0]
    charge["surprise"] = 1
    assert any("surprise" in fault for fault in faults(document, schema, shown))
    del charge["surprise"]
    mass = charge.pop("mass_mg")
    assert any("mass_mg" in fault for fault in faults(document, schema, shown))
    charge["mass_mg"] = float(mass)
    assert any("mass_mg" in fault for fault in faults(document, schema, shown))
    bottle = lab.client().get(planted.path("bottle-detail")).json()
    schema = {"$ref": "#/components/schemas/Bottle"}
    assert faults(document, schema, bottle) == []
    assert faults(document, schema, {**bottle, "usable_volume_ml": "1"}) != []
    del bottle["usable_mass_mg"]
    assert faults(document, schema, bottle) != []


@pytest.mark.parametrize(
    ("order", "fits"),
    [
        (octyl_order(), True),
        (octyl_order(product_mass_g=2), True),
        (octyl_order(product_mass_g=None, acceptor_amount_mmol="1e-2"), True),
        (octyl_order(promoter="tin-tetrachloride"), True),
        (octyl_order(colour="red"), False),
        (octyl_order(project=None), False),
        (octyl_order(product_mass_g=1001), False),
        (octyl_order(product_mass_g="two"), False),
        (octyl_order(promoter="not a code"), False),
        (octyl_order(target_smiles=7.5), False),
    ],
)
def test_what_the_description_of_a_body_refuses_is_refused(
    order: dict[str, Any], fits: bool, lab: Laboratory, document: dict[str, Any]
) -> None:
    schema = {"$ref": "#/components/schemas/OrderRequest"}
    assert (faults(document, schema, order) == []) is fits
    if "target_smiles" in order and order["target_smiles"] != 7.5:  # numbers are read as text
        assert (lab.client().post(PROCEDURES, order).status_code == 202) is fits


def test_the_example_of_a_preview_can_be_planned(lab: Laboratory, document: dict[str, Any]) -> None:
    content = document["paths"][ROUTES]["post"]["requestBody"]["content"]["application/json"]
    (example,) = content["examples"].values()
    answer = lab.client().post(ROUTES, example["value"]).json()
    assert answer["verdict"] == "plannable"


def test_the_examples_fit_their_schemas(document: dict[str, Any]) -> None:
    schemas = document["components"]["schemas"]
    for name, schema in schemas.items():
        assert faults(document, schema, example_of(schema, schemas)) == [], name


def test_the_page_shows_everything_and_loads_nothing(document: dict[str, Any]) -> None:
    response = ApiTestClient(None).get("/api/v1/docs/", Accept="text/html")
    assert response["Content-Type"] == "text/html; charset=utf-8"
    page = response.content.decode()
    anchors = set(re.findall(r'id="([^"]+)"', page))
    schemas = document["components"]["schemas"]
    operations = [o for methods in document["paths"].values() for o in methods.values()]
    assert anchors == {o["operationId"] for o in operations} | set(schemas)
    links = set(re.findall(r'href="([^"]+)"', page))
    assert links == {f"#{anchor}" for anchor in anchors} | {"/api/v1/openapi.json"}
    for path in document["paths"]:
        assert path in page
    for schema in schemas.values():
        for name in schema["properties"]:
            assert f"<td>{name}" in page
    assert not re.search(r"<script|<link|<img|<iframe|src=|@import|url\(", page)
    addresses = set(re.findall(r"https?://[^/\s<]+", page))
    assert addresses == {"http://127.0.0.1:8000"}
