"""The sheet as PDF over HTTP."""

import hashlib
from typing import Any

import pytest

from tests.laboratory import PROCEDURES, Laboratory, octyl_order


@pytest.fixture
def planned(live_lab: Laboratory) -> dict[str, Any]:
    client = live_lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    assert accepted.json()["links"]["sheet_pdf"] is None
    live_lab.run_outbox()
    shown: dict[str, Any] = client.get(accepted["Location"]).json()
    return shown


def test_the_sheet_is_a_pdf_with_its_hash_and_name(
    live_lab: Laboratory, planned: dict[str, Any]
) -> None:
    client, path = live_lab.client(), planned["links"]["sheet_pdf"]
    assert path == f"/api/v1/procedures/{planned['code']}/sheet.pdf"
    answer = client.get(path, Accept="application/pdf")
    assert (answer.status_code, answer["Content-Type"]) == (200, "application/pdf")
    assert answer.content.startswith(b"%PDF-")
    assert answer["ETag"] == f'"{hashlib.sha256(answer.content).hexdigest()}"'
    assert answer["Content-Disposition"] == f'inline; filename="{planned["code"]}-a4.pdf"'
    again = client.get(path, If_None_Match=answer["ETag"])
    assert (again.status_code, again.content) == (304, b"")
    assert client.get(f"{path}?paper=a4").content == answer.content
    letter = client.get(f"{path}?paper=letter")
    assert letter["Content-Disposition"] == f'inline; filename="{planned["code"]}-letter.pdf"'
    assert letter["ETag"] != answer["ETag"]


@pytest.mark.parametrize(
    ("query", "status", "code", "field"),
    [
        ("?paper=a5", 422, "unknown_paper", "paper"),
        ("?size=a4", 400, "unknown_parameter", "size"),
    ],
)
def test_another_paper_or_parameter_is_refused(
    live_lab: Laboratory, planned: dict[str, Any], query: str, status: int, code: str, field: str
) -> None:
    answer = live_lab.client().get(planned["links"]["sheet_pdf"] + query)
    assert answer.status_code == status
    assert answer["Content-Type"] == "application/problem+json"
    (error,) = answer.json()["errors"]
    assert (error["field"], error["code"]) == (field, code)


def test_a_stranger_and_a_queued_procedure_get_nothing(live_lab: Laboratory) -> None:
    accepted = live_lab.client().post(PROCEDURES, octyl_order())
    path = accepted["Location"] + "sheet.pdf"
    assert live_lab.client().get(path).status_code == 404
    live_lab.run_outbox()
    assert live_lab.client().get(path).status_code == 200
    assert live_lab.stranger().get(path).status_code == 404
