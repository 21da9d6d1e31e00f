"""The stored document and the sheet made from it."""

import hashlib
import html
import io
import json
import re
from html.parser import HTMLParser
from typing import Any

import pytest
from pypdf import PdfReader

from inventory.services.verify import verify_ledger
from labplan.base.canonical import canonical_bytes
from labplan.base.models import PersonName, Project
from labplan.base.seal import newest_printed, seal_new
from labplan.procedures.models import Document
from tests.api import targets
from tests.api.problems import assert_problem
from tests.laboratory import OCTYL_GLUCOSIDE, PROCEDURES, Laboratory, octyl_order

LOADING = {"src", "href", "action", "xlink:href", "srcset", "data", "poster", "formaction"}


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
    """The text of a page, its tags, all attributes, and those that could load something."""

    def __init__(self, source: str) -> None:
        super().__init__()
        self.words: list[str] = []
        self.tags: set[str] = set()
        self.addresses: list[str] = []
        self.attributes: set[str] = set()
        self._is_style = False
        self.feed(source)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.add(tag)
        self._is_style = tag == "style"
        self.attributes |= {name for name, _ in attrs}
        self.addresses += [str(v) for name, v in attrs if name in LOADING]

    def handle_data(self, data: str) -> None:
        if not self._is_style:
            self.words.append(data)

    def handle_endtag(self, tag: str) -> None:
        self._is_style = False

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
    assert_every_charge_is_on(sheet_of(lab, planned), planned["document"], count=17)


def test_the_sheet_of_three_stages_names_all_their_charges(lab: Laboratory) -> None:
    shown = order_and_plan(lab, target_smiles=targets.LACTOSIDE_FREE)
    stages = shown["document"]["route"]["stages"]
    assert [stage["number"] for stage in stages] == [1, 2, 3]
    source = sheet_of(lab, shown)
    assert_every_charge_is_on(source, shown["document"], count=35)
    text = Page(source).text
    for stage in stages:
        assert squeezed(stage["product"]["name"]) in squeezed(text)
        for ion in stage["ions"]:
            assert ion["mz"] in text
    for line in shown["document"]["route"]["why"]:
        assert squeezed(line) in squeezed(text)
    for warning in shown["document"]["route"]["warnings"]:
        assert squeezed(warning["detail"]) in squeezed(text)


def assert_every_charge_is_on(source: str, document: dict[str, Any], *, count: int) -> None:
    """Amount and bottle of a charge stand close together, with its lot and its place."""
    text = Page(source).text
    charges = [c for s in document["route"]["stages"] for c in s["charges"]]
    assert len(charges) == count
    for charge in charges:
        assert squeezed(charge["name"]) in squeezed(text), charge["key"]
        where = charge["bottle"] or (
            f"stage {charge['from_stage']}" if charge["from_stage"] else "supply"
        )
        assert any(
            where in text[max(0, at - 300) : at + 300]
            for at in places_of(charge["amount_text"], text)
        ), charge["key"]
        if charge["bottle"]:
            assert charge["lot"] in text
            assert charge["place"] in text


def places_of(part: str, text: str) -> list[int]:
    """Where the part stands as a whole: no digit or letter at its ends."""
    return [found.start() for found in re.finditer(rf"(?<![\w.]){re.escape(part)}(?!\w)", text)]


def test_the_sheet_has_every_step_in_order(lab: Laboratory, planned: dict[str, Any]) -> None:
    text = squeezed(Page(sheet_of(lab, planned)).text)
    steps = planned["document"]["route"]["stages"][0]["steps"]
    assert [step["number"] for step in steps] == list(range(1, len(steps) + 1))
    at = 0
    for step in steps:
        at = text.index(squeezed(step["title"]), at)
        at = text.index(squeezed(step["text"]), at)
        assert squeezed(step["pause"]) in text[at:]
        assert squeezed(step["watch"]) in text


TYPESET = str.maketrans({"α": "alpha", "β": "beta", "µ": "u", "−": "-", "→": "->"})


def squeezed(text: str) -> str:
    """Without spaces, capitals and typesetting, so that marked-up words do not matter."""
    return re.sub(r"\s+", "", text).translate(TYPESET).lower()


def test_the_sheet_has_every_hazard_statement_and_says_what_is_unknown(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = squeezed(Page(sheet_of(lab, planned)).text)
    hazards = planned["document"]["hazards"]
    statements = [s for h in hazards for s in h["hazard_statements"]]
    assert len(statements) > 20
    for line in hazards:
        assert squeezed(line["name"]) in text
        for statement in (*line["hazard_statements"], *line["precautionary_statements"]):
            assert squeezed(statement["code"]) in text
            assert squeezed(statement["text"].rstrip(".")) in text
    unknown = [h["name"] for h in hazards if not h["established"]]
    assert len(unknown) >= 2
    assert "hazardsnotestablished:handleashazardous" in text
    for name in unknown:
        near = [text[found.end() : found.end() + 1500]
                for found in re.finditer(re.escape(squeezed(name)), text)]  # fmt: skip
        assert any("notestablished" in part for part in near), name


@pytest.mark.parametrize(
    ("smiles", "solvents"),
    [(OCTYL_GLUCOSIDE, set()), (targets.LACTOSIDE_FREE, {"methanol"})],
    ids=["one stage", "three stages"],
)
def test_every_substance_in_a_flask_has_a_line_of_hazards(
    smiles: str, solvents: set[str], lab: Laboratory
) -> None:
    """What is bought, the solvent of a solution, and one line for what each stage makes."""
    document = order_and_plan(lab, target_smiles=smiles)["document"]
    stages = document["route"]["stages"]
    bought = {c["substance"] for s in stages for c in s["charges"] if c["from_stage"] is None}
    if "sodium-methoxide" in bought:  # sold as a solution, which has a classification of its own
        bought = bought - {"sodium-methoxide"} | {"sodium-methoxide-25-in-methanol"}
    lines = [line["substance"] for line in document["hazards"]]
    assert set(lines) == bought | solvents | {"made here"}
    assert lines.count("made here") == len(stages)
    assert len(set(lines)) == len(lines) - len(stages) + 1


def test_the_sheet_says_whose_it_is_and_what_it_was_made_from(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    assert planned["document_sha256"] in text
    assert "LECTIN-07" in text
    assert "Glycoside probes for lectin binding" in text
    assert "Mira Okonjo" in text
    assert "MIRA" in text
    assert planned["code"] in text
    assert "2026-12-01" in text
    for caution in planned["document"]["cautions"]:
        assert caution in text
    for version in planned["document"]["versions"].values():
        assert version in text
    assert "qualified chemist" in text


def test_the_sheet_carries_the_newest_seal_of_the_moment_it_was_planned(lab: Laboratory) -> None:
    """Later seals change neither paper: the same document is printed with the same bytes."""
    seal_new()
    seal = newest_printed()
    shown = order_and_plan(lab)
    pdf = lab.client().get(shown["links"]["sheet_pdf"])
    assert seal in Page(sheet_of(lab, shown)).text
    first_page = PdfReader(io.BytesIO(pdf.content)).pages[0].extract_text()
    assert seal in first_page.replace("\n", "")
    assert seal_new() > 0
    assert newest_printed() != seal
    assert lab.client().get(shown["links"]["sheet_pdf"]).content == pdf.content
    assert verify_ledger(newest=seal).faults == ()


def test_before_the_first_seal_the_sheet_says_so(lab: Laboratory, planned: dict[str, Any]) -> None:
    assert "none yet" in Page(sheet_of(lab, planned)).text


def test_an_erased_name_leaves_a_sheet_with_the_code(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    PersonName.objects.filter(person__code="MIRA").delete()
    text = Page(sheet_of(lab, planned)).text
    assert "MIRA" in text
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
    assert "<b onclick=x>Mira</b>" in page.text
    assert "script" not in page.tags
    assert not {name for name in page.attributes if name.startswith("on")}
    assert not [address for address in page.addresses if "elsewhere" in address]


def test_the_sheet_loads_nothing_from_elsewhere(lab: Laboratory, planned: dict[str, Any]) -> None:
    source = sheet_of(lab, planned)
    page = Page(source)
    # the name of a namespace is no address
    source = re.sub(r'xmlns(:\w+)?="http://www\.w3\.org/[\w/]+"', "", source)
    assert not re.search(r"https?:|//[a-z]|@import|url\((?!#)", source)
    assert [address for address in page.addresses if not address.startswith(("data:", "#"))] == []
    assert not {"script", "link", "iframe", "object", "embed", "base"} & page.tags


def test_the_sheet_prints_on_a4(lab: Laboratory, planned: dict[str, Any]) -> None:
    source = sheet_of(lab, planned)
    assert re.search(r"@page\s*\{[^}]*size:\s*A4", source)
    assert source.startswith("<!doctype html>")
    assert '<meta charset="utf-8">' in source


def test_a_refused_procedure_has_a_sheet_with_the_reasons(lab: Laboratory) -> None:
    shown = order_and_plan(lab, target_smiles=targets.ALPHA_OCTYL)
    text = Page(sheet_of(lab, shown)).text
    assert squeezed(shown["reasons"][0]["detail"]) in squeezed(text)
    assert shown["code"] in text
    assert "GPA-1" not in text


def test_nothing_on_the_sheet_is_an_empty_or_unfilled_figure(
    lab: Laboratory, planned: dict[str, Any]
) -> None:
    text = Page(sheet_of(lab, planned)).text
    assert not re.search(r"\b(None|null|NaN|inf|undefined)\b|\{\{|\{%", text)
    assert not re.search(r" (mg|mL|mmol|g/mol) ?\1", text)
