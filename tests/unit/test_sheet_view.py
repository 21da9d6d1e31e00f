"""What the sheet says, from a document, before it is set on paper; and how text is typeset."""

from typing import Any

import pytest

from labplan.procedures.sheet.model import scale_text
from labplan.procedures.sheet.typography import (
    heading_name,
    set_formula,
    set_ion,
    set_text,
)
from tests.sheets import LACTOSIDE, document, lactoside, octyl, refused, short, view
from tests.targets import OCTYL_GLUCOSIDE


@pytest.mark.parametrize(
    ("text", "plain"),
    [
        ("octa-O-acetyl-beta-lactose", "octa-O-acetyl-β-lactose"),
        ("the alpha anomer of beta-D-Gal", "the α anomer of β-D-Gal"),
        ("alphabet and betaine", "alphabet and betaine"),
        ("silica gel, 40 to 63 um", "silica gel, 40 to 63\u00a0µm"),
        ("91 mL in 15 min at 40 °C", "91\u00a0mL in 15\u00a0min at 40\u00a0°C"),
        ("two mL", "two mL"),
        ("", ""),
    ],
)
def test_names_and_units_are_written_as_a_chemist_writes_them(text: str, plain: str) -> None:
    assert set_text(text).plain == plain


@pytest.mark.parametrize(
    ("text", "styled"),
    [
        ("46.5 % as BF3 = 97.33 %", [("sub", "3")]),
        ("Sc(OTf)3 and Na2SO4", [("sub", "3"), ("sub", "2"), ("sub", "4")]),
        ("3J(H1,H2) 7 to 8.5 Hz", [("sup", "3"), ("i", "J")]),
        ("tetra-O-acetyl", [("i", "O")]),
        ("N-iodosuccinimide", [("i", "N")]),
        ("beta-D-glucopyranoside, L-Ser", [("small", "D"), ("small", "L")]),
        ("resin, H+ form", [("sup", "+")]),
        ("1H NMR", [("sup", "1")]),
        ("(bottle BFE-1), then bottle D-12.", [("code", "BFE-1"), ("code", "D-12")]),
        ("look for [M+NH4]+", [("sub", "4"), ("sup", "+")]),
        ("H226, C-2, P280, FC1 and pH 7; NaN32", []),
    ],
)
def test_only_what_is_meant_is_raised_lowered_or_slanted(
    text: str, styled: list[tuple[str, str]]
) -> None:
    runs = set_text(text)
    assert [run for run in runs if run[0]] == styled
    assert runs.plain == set_text(runs.plain).plain


def test_formulas_and_ions() -> None:
    assert set_formula("BF3.OEt2") == [
        ("", "BF"), ("sub", "3"), ("", "·OEt"), ("sub", "2"),
    ]  # fmt: skip
    assert set_ion("[M+NH4]+") == [("", "[M+NH"), ("sub", "4"), ("", "]"), ("sup", "+")]
    assert set_ion("[M-OAc]+") == [("", "[M\u2212OAc]"), ("sup", "+")]
    assert set_ion("[M-H]-")[-1] == ("sup", "\u2212")
    assert heading_name("pent-4-en-1-yl") == "Pent-4-en-1-yl"
    assert heading_name("beta-lactose") == "beta-lactose"


def test_the_head_names_target_project_person_hash_and_versions() -> None:
    shown = view(lactoside())
    assert shown["name"].plain == "Pent-4-en-1-yl β-lactoside"
    assert shown["formula"] == set_formula("C17H30O11")
    assert (shown["molar_mass"], shown["scale"]) == ("410.416 g/mol", "2.000 g of product")
    facts = {fact["label"]: fact["value"] for fact in shown["facts"]}
    assert facts["Project"] == "LECTIN-07, Lectin probes"
    assert facts["Requested by"] == "MIRA, Mira Example"
    assert facts["Document"] == "ab" * 32
    assert facts["Book seal (for the stock keeper)"] == "none yet"
    assert facts["Made with"].startswith("engine ")
    assert shown["smiles"] == lactoside()["target"]["smiles"]


def test_the_scheme_of_three_stages_fits_the_paper_in_one_row() -> None:
    (row,) = view(lactoside())["scheme"]
    assert [part["kind"] for part in row] == [
        "structure", "plus", "structure", "arrow", "structure", "arrow", "structure",
    ]  # fmt: skip
    assert sum(part["width_mm"] for part in row) <= 178.01
    assert [part["over"] for part in row if part["kind"] == "arrow"] == ["stage 2", "stage 3"]
    scales = {
        round(part["drawn_mm"] / float(drawing["width_mm"]), 2)
        for part, drawing in zip(
            (p for p in row if p["kind"] == "structure"), lactoside()["drawings"], strict=True
        )
    }
    assert len(scales) == 1
    assert all(part["alt"].startswith("Structure of the ") for part in row if "alt" in part)


def test_an_older_document_without_drawings_is_still_shown() -> None:
    plain = {name: value for name, value in octyl().items() if name != "drawings"}
    assert view(plain)["scheme"] == []
    assert len(view(plain)["stages"]) == 1


def test_a_liquid_shows_both_quantities_and_what_was_made_here_its_molar_mass() -> None:
    stages = view(lactoside())["stages"]
    charges = {c["role"]: c for stage in stages for c in stage["charges"]}
    assert (charges["promoter"]["take"].plain, charges["promoter"]["also"].plain) == (
        "3.51\u00a0mL", "3.949\u00a0g",
    )  # fmt: skip
    assert charges["promoter"]["equivalents"] == "3.000 → 3.001"
    donor = charges["donor"]
    assert (donor["bottle"], donor["place"]) == ("stage 1", "made here")
    assert [part.plain for part in donor["identity"]] == ["678.593\u00a0g/mol"]
    solvents = [c for s in stages for c in s["charges"] if c["name"].plain == "Dichloromethane"]
    assert [c["also"].plain for c in solvents] == ["121\u00a0g"]  # 91 mL at 1.3266 g/mL


def test_every_step_asks_for_the_amount_of_every_charge_it_uses() -> None:
    source, shown = lactoside(), view(lactoside())
    for before, after in zip(source["route"]["stages"], shown["stages"], strict=True):
        for step, printed in zip(before["steps"], after["steps"], strict=True):
            assert len(printed["amounts"]) == len(step["charges"])
        last = after["steps"][-1]
        assert last["weighed"] == ["product weighed"]
        assert sum(step["is_sampled"] for step in after["steps"]) >= 1
    coupling = shown["stages"][1]["steps"]
    assert [s["number"] for s in coupling if s["weighed"] == ["crude weighed"]] == [9]
    assert [s["title"].plain for s in coupling if s["is_sampled"]] == ["Let it react"]


def test_unknown_hazards_are_said_to_be_unknown_and_nothing_is_left_out() -> None:
    source, hazards = lactoside(), view(lactoside())["hazards"]
    parts = [hazards[name] for name in ("classified", "unknown", "not_classified")]
    assert sum(map(len, parts)) == len(source["hazards"])
    assert len(hazards["unknown"]) == sum(not h["established"] for h in source["hazards"]) >= 3
    for line in hazards["unknown"]:
        assert line["summary"].plain == "Hazards not established: handle as hazardous"
    phrases = {p["code"] for column in hazards["phrases"] for p in column}
    assert phrases == {s["code"] for h in source["hazards"] for s in h["precautionary_statements"]}
    codes = [p["code"] for column in hazards["phrases"] for p in column]
    assert codes == sorted(codes)


def test_water_that_nobody_measured_is_printed_bold_and_by_name() -> None:
    changed = octyl()
    changed["route"]["stages"][0]["water"]["lines"][0]["amount_mmol"] = None
    figures = {f["label"]: f for f in view(changed)["stages"][0]["figures"]}
    assert figures["Water unknown"]["strong"] is True
    assert "measure it" in figures["Water unknown"]["text"].plain


def test_a_refused_and_a_short_document_say_why_and_ask_for_no_approval() -> None:
    no, little = view(refused(), state="refused"), view(short(), state="short")
    assert [part["kind"] for row in no["scheme"] for part in row] == ["structure"]
    assert (no["stages"], no["expectations"], len(no["reasons"])) == ([], None, 1)
    assert no["state"] == "not to be run (refused)"
    assert (little["stages"], little["expectations"]) == ([], None)
    assert [line["name"].plain for line in little["shortages"]] == [
        "Boron trifluoride diethyl etherate"
    ]


@pytest.mark.parametrize(
    ("mass_mg", "mmol", "text"),
    [
        ("2000", None, "2.000 g of product"),
        ("1.25", None, "1.25 mg of product"),
        (None, "7.5000", "7.5 mmol of acceptor"),
    ],
)
def test_the_scale_is_as_asked(mass_mg: str | None, mmol: str | None, text: str) -> None:
    from decimal import Decimal

    given: list[Any] = [Decimal(value) if value else None for value in (mass_mg, mmol)]
    assert scale_text(*given) == text


def test_the_helpers_give_three_stages_and_one() -> None:
    assert len(document(LACTOSIDE)["route"]["stages"]) == 3
    assert len(document(OCTYL_GLUCOSIDE)["route"]["stages"]) == 1
