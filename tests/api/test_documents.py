"""The stored document and the sheet made from it."""

import hashlib
import html
import json
import re
from html.parser import HTMLParser
from typing import Any

import pytest

from labplan.base.canonical import canonical_bytes
from labplan.base.models import PersonName, Project
from labplan.procedures.models import Document
from tests.api import targets
from tests.api.problems import assert_problem
from tests.laboratory import PROCEDURES, Laboratory, octyl_order


@pytest.fixture
def planned(lab: Laboratory) -> dict[str, Any]:
    """A planned procedure as its detail shows it."""
    return order_and_plan(lab)


def order_and_plan(lab: Laboratory, **changes: Any) -> dict[str, Any]:
    client = lab.client()
    location = client.post(PROCEDURES, octyl_order(**changes))["Location"]
    assert lab.run_outbox() == 1
    shown: dict[str, Any] = client.get(location).json()
    return shown


class Page(HTMLParser):
    """The text of a page and the attributes that could load something."""

    def __init__(self, source: str) -> None:
        super().__init__()
        self.words: list[str] = []
        self.tags: set[str] = set()
        self.addresses: list[str] = []
        self.feed(source)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.add(tag)
        self.addresses += [str(v) for name, v in attrs if name in {"src", "href", "action"}]

    def handle_data(self, data: str) -> None:
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def sheet_of(lab: Laboratory, shown: dict[str, Any]) -> str:
    response = lab.client().get(shown["links"]["sheet_html"])
    assert response.status_code == 200
    assert response["Content-Type"] == "text/html; charset=utf-8"
    text: str = response.content.decode()
    return text


def test_the_document_is_the_stored_bytes_and_its_etag_is_their_hash(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    response = lab.client().get(planned["links"]["document"])
    assert response["Content-Type"] == "application/json"
    assert response.content == bytes(Document.objects.get().body)
    digest = hashlib.sha256(response.content).hexdigest()
    assert response["ETag"] == f'"{digest}"'
    assert planned["document_sha256"] == digest
    assert Document.objects.get().sha256 == digest


def test_the_document_is_in_its_canonical_form(lab: Laboratory, planned: dict[str, Any]) -> None:
    body = lab.client().get(planned["links"]["document"]).content
    assert canonical_bytes(json.loads(body)) == body
    assert json.loads(body) == planned["document"]


def test_who_has_the_document_gets_no_body_again(lab: Laboratory, planned: dict[str, Any]) -> None:
    client, path = lab.client(), planned["links"]["document"]
    etag = client.get(path)["ETag"]
    again = client.get(path, If_None_Match=etag)
    assert (again.status_code, again.content, again["ETag"]) == (304, b"", etag)
    assert client.get(path, If_None_Match='"another"').status_code == 200


@pytest.mark.parametrize("name", ["document/", "sheet.html"])
def test_a_queued_procedure_has_no_document(name: str, lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    body = assert_problem(client.get(accepted["Location"] + name), 404, "not_found")
    assert "is queued and has no document" in body["detail"]
    assert accepted.json()["links"]["document"] is None
    assert accepted.json()["links"]["sheet_html"] is None


def test_the_sheet_is_given_whatever_is_accepted(lab: Laboratory, planned: dict[str, Any]) -> None:
    client, path = lab.client(), planned["links"]["sheet_html"]
    for accept in ("text/html", "text/html;q=0.9,application/xhtml+xml", "application/json"):
        assert client.get(path, Accept=accept).status_code == 200
    missing = client.get(PROCEDURES + "P-22222222/sheet.html", Accept="text/html")
    assert_problem(missing, 404, "not_found")


def test_the_sheet_names_every_charge_with_amount_and_bottle(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    charges = [c for s in planned["document"]["route"]["stages"] for c in s["charges"]]
    assert len(charges) == 14
    for charge in charges:
        bottle = f"{charge['bottle']} , {charge['place']}"
        place = bottle if charge["bottle"] else "laboratory supply"
        row = text.index(f"{charge['role']} {charge['name']}")
        assert charge["amount_text"] in text[row : row + 300], charge["key"]
        assert place in text[row : row + 300], charge["key"]
        if charge["lot"]:
            assert f"lot {charge['lot']}" in text


def test_the_sheet_has_every_step_in_order(lab: Laboratory, planned: dict[str, Any]) -> None:
    text = Page(sheet_of(lab, planned)).text
    steps = planned["document"]["route"]["stages"][0]["steps"]
    assert [step["number"] for step in steps] == list(range(1, len(steps) + 1))
    places = []
    for step in steps:
        whole = f"{step['number']} {step['title']}. {' '.join(step['text'].split())}"
        places.append(text.index(whole))
        assert text.index(step["pause"].capitalize() + ".", places[-1]) > 0
        if step["watch"]:
            assert f"Watch: {step['watch']}." in text
    assert places == sorted(places)


def test_the_sheet_has_every_hazard_statement_and_says_what_is_unknown(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    section = text[text.index("Hazards Substance Signal word") :]
    hazards = planned["document"]["hazards"]
    statements = [s for h in hazards for s in h["hazard_statements"]]
    assert len(statements) > 20
    for line in hazards:
        row = section[section.index(line["name"]) :]
        for statement in (*line["hazard_statements"], *line["precautionary_statements"]):
            assert f"{statement['code']} {statement['text']}" in row
    unknown = [h["name"] for h in hazards if not h["established"]]
    assert len(unknown) >= 2
    for name in unknown:
        row = section[section.index(name) + len(name) :].strip()
        assert row.startswith("unknown Hazards not established: handle as hazardous.")


def test_every_substance_in_the_flask_has_a_line_of_hazards(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    document = planned["document"]
    substances = {c["substance"] for s in document["route"]["stages"] for c in s["charges"]}
    assert {line["substance"] for line in document["hazards"]} == {*substances, "made here"}


def test_the_sheet_says_whose_it_is_and_what_it_was_made_from(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    assert planned["document_sha256"] in text
    assert "LECTIN-07, Glycoside probes for lectin binding" in text
    assert "MIRA, Mira Okonjo" in text
    assert f"{planned['code']} (planned)" in text
    assert "Shelf as of 2026-12-01" in text
    for caution in planned["document"]["cautions"]:
        assert caution in text
    for version in planned["document"]["versions"].values():
        assert version in text
    assert "Checked and approved by a qualified chemist" in text


def test_an_erased_name_leaves_a_sheet_with_the_code(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    PersonName.objects.filter(person__code="MIRA").delete()
    text = Page(sheet_of(lab, planned)).text
    assert "Asked for by MIRA Shelf" in text
    assert "Okonjo" not in text


def test_what_people_typed_is_escaped_on_the_sheet(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    title = """<script>alert('x')</script> & "co" <img src=//elsewhere.example/x>"""
    Project.objects.filter(code="LECTIN-07").update(title=title)
    PersonName.objects.filter(person__code="MIRA").update(full_name="<b onclick=x>Mira</b>")
    source = sheet_of(lab, planned)
    page = Page(source)
    assert html.escape(title) in source
    assert not {"script", "img", "b"} & page.tags
    assert "<b onclick=x>Mira</b>" in page.text


def test_the_sheet_loads_nothing_from_elsewhere(lab: Laboratory, planned: dict[str, Any]) -> None:
    source = sheet_of(lab, planned)
    page = Page(source)
    assert not re.search(r"https?:|//[a-z]|@import|url\(", source)
    assert page.addresses == []
    assert not {"script", "link", "iframe", "object", "embed", "img", "base"} & page.tags


def test_the_sheet_prints_on_a4(lab: Laboratory, planned: dict[str, Any]) -> None:
    source = sheet_of(lab, planned)
    assert re.search(r"@page \{ size: A4;", source)
    assert source.startswith("<!doctype html>")
    assert '<meta charset="utf-8">' in source


def test_a_refused_procedure_has_a_sheet_with_the_reasons(lab: Laboratory) -> None:
    shown = order_and_plan(lab, target_smiles=targets.ALPHA_OCTYL)
    text = Page(sheet_of(lab, shown)).text
    assert "Why this is not planned" in text
    assert shown["reasons"][0]["detail"] in text
    assert "[wrong_relation_1_2_cis]" in text
    assert "Into the flask" not in text


def test_nothing_on_the_sheet_is_an_empty_or_unfilled_figure(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    assert not re.search(r"\b(None|null|NaN|inf|undefined)\b|\{\{|\{%", text)
    assert not re.search(r" (mg|mL|mmol|g/mol) ?\1", text)
