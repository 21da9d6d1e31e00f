"""Query parameters: what an address does not read is refused, and nothing counts twice."""

import pytest

from tests.laboratory import PROCEDURES, Laboratory, octyl_order


@pytest.mark.parametrize(
    "path",
    [
        "/api/v1/bottles/GPA-1/?x=1",
        "/api/v1/projects/LECTIN-07/?x=1",
        "/api/v1/substances/1-octanol/?x=1",
        "/api/v1/bottles/?x=1",
    ],
)
def test_an_unknown_parameter_is_refused_everywhere(lab: Laboratory, path: str) -> None:
    answer = lab.client().get(path)
    assert (answer.status_code, answer.json()["code"]) == (400, "unknown_field")


def test_an_unknown_parameter_of_a_request_stores_nothing(lab: Laboratory) -> None:
    before = lab.counts()
    answer = lab.client().post(PROCEDURES + "?x=1", octyl_order())
    assert (answer.status_code, answer.json()["code"]) == (400, "unknown_field")
    assert lab.counts() == before


@pytest.mark.parametrize("query", ["page_size=1&page_size=2", "status=usable&status=usable"])
def test_a_parameter_given_twice_is_refused(lab: Laboratory, query: str) -> None:
    answer = lab.client().get(f"/api/v1/bottles/?{query}")
    assert (answer.status_code, answer.json()["code"]) == (400, "malformed_request")
    assert query.partition("=")[0] in answer.json()["detail"]


@pytest.mark.parametrize("mark", ["\u202e", "\u200b", "\u0421"])
def test_a_character_that_no_smiles_has_is_refused(lab: Laboratory, mark: str) -> None:
    before = lab.counts()
    order = octyl_order()
    order["target_smiles"] = mark + order["target_smiles"]
    answer = lab.client().post(PROCEDURES, order)
    assert answer.status_code == 422
    assert [e["code"] for e in answer.json()["errors"]] == ["smiles_unreadable"]
    assert lab.counts() == before


def test_one_problem_type_has_one_title(lab: Laboratory) -> None:
    missing, unserved = lab.client().get("/api/v1/bottles/NO/"), lab.client().get("/api/v1/no/")
    assert missing.json()["type"] == unserved.json()["type"]
    assert missing.json()["title"] == unserved.json()["title"]
