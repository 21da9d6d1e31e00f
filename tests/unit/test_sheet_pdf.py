"""The PDF: the same bytes everywhere, tagged, on both papers, with every figure of the document."""

import io
import re
import subprocess
import sys
import time
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from pypdf import PdfReader
from pypdf.generic import ArrayObject, DictionaryObject

from labplan.procedures.sheet import pdf as pdf_module
from labplan.procedures.sheet.pdf import PAPERS, sheet_pdf
from tests.sheets import AZIDOETHYL, document, lactoside, octyl, refused, short, view

ROOT = Path(__file__).resolve().parents[2]
HOSTILE = '#panic("x") *bold* <script>alert(1)</script> $x$ @ref `raw` \\ = heading // gone'


@cache
def made(name: str, paper: str = "a4") -> bytes:
    kinds = {"three": lactoside, "one": octyl, "refused": refused, "short": short,
             "azide": lambda: document(AZIDOETHYL, 1000.0)}  # fmt: skip
    return sheet_pdf(view(kinds[name]()), paper)


def read(pdf: bytes) -> PdfReader:
    return PdfReader(io.BytesIO(pdf), strict=True)


def flat(text: str) -> str:
    """Text without its spaces: subscripts and line ends put some in and take some out."""
    return re.sub(r"\s+", "", text)


def text_of(pdf: bytes) -> str:
    return flat("".join(page.extract_text() for page in read(pdf).pages))


def test_title_language_and_tags_are_there() -> None:
    reader = read(made("three"))
    root: Any = reader.trailer["/Root"]
    assert reader.metadata is not None
    assert reader.metadata.title == "P-7K2M4Q9X: Pent-4-en-1-yl β-lactoside"
    assert root["/Lang"] == "en"
    assert root["/MarkInfo"]["/Marked"] == True  # noqa: E712 - pypdf's own boolean
    assert root["/ViewerPreferences"]["/DisplayDocTitle"] == True  # noqa: E712
    assert "pdfuaid" in root["/Metadata"].get_data().decode()
    assert "/CreationDate" not in reader.metadata


def structure(pdf: bytes) -> list[DictionaryObject]:
    """Every element of the structure tree, in reading order."""
    found: list[DictionaryObject] = []

    def walk(node: Any) -> None:
        node = node.get_object()
        if isinstance(node, ArrayObject):
            for child in node:
                walk(child)
        elif isinstance(node, DictionaryObject):
            if "/S" in node:
                found.append(node)
            if "/K" in node:
                walk(node["/K"])

    root: Any = read(pdf).trailer["/Root"]
    walk(root["/StructTreeRoot"]["/K"])
    return found


def test_tables_have_header_cells_and_pictures_say_what_they_are() -> None:
    elements = structure(made("three"))
    kinds = [str(element["/S"]) for element in elements]
    assert kinds.count("/H1") == 1
    assert kinds.count("/H2") >= 6
    shown = view(lactoside())
    header_cells = 2 + 3 * (7 + 6) + (2 + len(shown["expectations"]["ion_names"])) + 4 + 4
    sampled = sum(step["is_sampled"] for stage in shown["stages"] for step in stage["steps"])
    assert kinds.count("/TH") == header_cells + 2 * sampled
    alts = [str(e["/Alt"]) for e in elements if str(e["/S"]) == "/Figure"]
    pictures = [f"{p['code']}: {p['name']}" for line in shown["hazards"]["classified"]
                for p in line["pictograms"]]  # fmt: skip
    assert sorted(a for a in alts if a.startswith("GHS")) == sorted(pictures)
    assert sum(a.startswith("Structure of the ") for a in alts) == 4
    assert len(alts) == len(pictures) + 4


@pytest.mark.parametrize(
    ("name", "paper", "most_pages"),
    [
        ("three", "a4", 9), ("three", "letter", 9), ("one", "a4", 5), ("one", "letter", 5),
        ("azide", "a4", 5), ("refused", "a4", 1), ("short", "a4", 1),
    ],
)  # fmt: skip
def test_each_paper_has_its_size_and_its_number_of_pages(
    name: str, paper: str, most_pages: int
) -> None:
    pages = read(made(name, paper)).pages
    size = {"a4": (595, 842), "letter": (612, 792)}[paper]
    assert {(round(p.mediabox.width), round(p.mediabox.height)) for p in pages} == {size}
    assert len(pages) <= most_pages
    for number, page in enumerate(pages, start=1):
        text = flat(page.extract_text())
        assert f"page{number}of{len(pages)}" in text
        assert "P-7K2M4Q9X" in text
        assert "document" + "ab" * 6 in text


def test_no_page_is_a_heading_alone_and_none_is_nearly_empty() -> None:
    for name in ("three", "one", "azide"):
        for paper in PAPERS:
            for page in read(made(name, paper)).pages:
                assert len(flat(page.extract_text())) > 300


SOURCES = {"three": lactoside, "one": octyl, "azide": lambda: document(AZIDOETHYL, 1000.0)}


@pytest.mark.parametrize("name", sorted(SOURCES))
def test_every_charge_is_on_paper_with_amount_bottle_lot_and_number(name: str) -> None:
    text = text_of(made(name))
    for stage in SOURCES[name]()["route"]["stages"]:
        assert f"Stage{stage['number']}:{stage['kind'].capitalize()}" in text
        for charge in stage["charges"]:
            # once in a table, once beside the step
            assert text.count(flat(charge["amount_text"])) >= 2, charge["key"]
            keys = ["bottle", "lot", "amount_mmol"]
            keys += ["cas"] if charge["group"] == "reaction" else []
            wanted = [flat(charge[key]) for key in keys if charge[key]]
            assert [word for word in wanted if word not in text] == []


@pytest.mark.parametrize("name", sorted(SOURCES))
def test_every_step_hazard_ion_and_bottle_passed_over_is_on_paper(name: str) -> None:
    source, text = SOURCES[name](), text_of(made(name))
    steps = [step for stage in source["route"]["stages"] for step in stage["steps"]]
    words = {word for step in steps for word in re.findall(r"[A-Za-z]{4,}", step["text"])}
    wanted = {flat(step["title"]) for step in steps} | (words - {"alpha", "beta"})
    for hazard in source["hazards"]:
        wanted |= {s["code"] + flat(s["text"])[:20] for s in hazard["hazard_statements"]}
        wanted |= {s["code"] for s in hazard["precautionary_statements"]}
    wanted |= {ion["mz"] for ion in source["expectations"]["ions"]}
    wanted |= {line["bottle"] for line in source["route"]["passed_over"]}
    assert {word for word in wanted if word not in text} == set()
    unknown = sum(not hazard["established"] for hazard in source["hazards"])
    assert text.count("Hazardsnotestablished:handleashazardous") == unknown
    assert "Checkedandapprovedbyaqualifiedchemist" in text


@pytest.mark.parametrize(("name", "said"), [("refused", "Whythisisnotplanned"),
                                            ("short", "Whattheshelfisshortof")])  # fmt: skip
def test_what_cannot_be_run_says_so_and_has_no_place_to_sign(name: str, said: str) -> None:
    text = text_of(made(name))
    assert said in text
    assert "Approval" not in text


def test_a_users_text_is_shown_and_never_read_as_markup() -> None:
    pdf = sheet_pdf(view(octyl(), project_title=HOSTILE, requested_by_name=HOSTILE))
    text = text_of(pdf)
    assert text.count(flat(HOSTILE)) == 2
    assert text_of(pdf).count(flat(octyl()["target"]["smiles"])) == 1


def test_characters_that_no_font_here_has_become_squares_and_the_sheet_says_so() -> None:
    title = "\u6f22\u5b57 \u2028 \x07 \u202e caf\u0065\u0301 α"
    text = text_of(sheet_pdf(view(octyl(), project_title=title)))
    assert "□□□□caf\u00e9α" in text
    assert "Charactersthatthefontsofthissheetlack" in text
    assert "Charactersthatthefontsofthissheetlack" not in text_of(made("one"))


def test_every_character_called_printable_is_printed() -> None:
    characters = "".join(
        chr(code) for first, last in pdf_module._PRINTABLE for code in range(first, last + 1)
    )
    view_of_all = view(refused(), project_title=" ".join(characters))
    assert len(read(sheet_pdf(view_of_all)).pages) >= 1


def test_a_very_long_title_and_name_stay_on_the_paper() -> None:
    shown = view(octyl(), project_title="Unbreakable" * 40, requested_by_name="Anna Maria " * 40)
    reader = read(sheet_pdf(shown, "letter"))
    right_edge = 612 - 14 / 25.4 * 72 + 1
    rightmost: list[float] = []

    def visit(text: str, _cm: Any, tm: list[float], _font: Any, _size: Any) -> None:
        if text.strip():
            rightmost.append(tm[4])

    reader.pages[0].extract_text(visitor_text=visit)
    assert flat("Unbreakable" * 40) in flat(reader.pages[0].extract_text())
    assert rightmost
    assert max(rightmost) < right_edge


_COMMAND = """
import os, sys
os.environ["DJANGO_SETTINGS_MODULE"] = "labplan.settings.test"
from labplan.procedures.sheet.pdf import sheet_pdf
from tests.sheets import lactoside, view
sys.stdout.buffer.write(sheet_pdf(view(lactoside()), sys.argv[1]))
"""


@pytest.mark.live
@pytest.mark.parametrize("paper", sorted(PAPERS))
def test_two_processes_seconds_apart_give_the_same_bytes(paper: str) -> None:
    def run(seed: str) -> bytes:
        return subprocess.run(
            [sys.executable, "-c", _COMMAND, paper], cwd=ROOT, capture_output=True, check=True,
            env={"PYTHONHASHSEED": seed, "PATH": "", "PYTHONPATH": str(ROOT)}, timeout=60,
        ).stdout  # fmt: skip

    first = run("1")
    time.sleep(1.2)
    assert run("2") == first
    assert made("three", paper) == first


def test_what_is_cancelled_has_no_place_to_sign() -> None:
    text = text_of(sheet_pdf(view(octyl(), state="cancelled")))
    assert "nottoberun(cancelled)" in text
    assert "Approvalandrecord" not in text
    assert "Approvalandrecord" in text_of(made("one"))


def test_papers_differ_and_there_are_two() -> None:
    assert made("one", "a4") != made("one", "letter")
    with pytest.raises(KeyError):
        sheet_pdf(view(octyl()), "a5")
