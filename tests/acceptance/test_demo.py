"""`manage.py demo` as a user runs it: another process, nothing set, twice."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from molmass import Formula

ROOT = Path(__file__).resolve().parents[2]
pytestmark = pytest.mark.live


def run_demo() -> str:
    bare = {name: os.environ[name] for name in ("PATH", "HOME") if name in os.environ}
    ended = subprocess.run(
        [sys.executable, "manage.py", "demo"],
        cwd=ROOT,
        env={**bare, "COLUMNS": "80"},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert ended.returncode == 0, ended.stderr
    assert ended.stderr == ""
    return ended.stdout


@pytest.fixture(scope="module")
def runs() -> list[str]:
    return [run_demo(), run_demo()]


@pytest.fixture(scope="module")
def answer(runs: list[str]) -> dict[str, Any]:
    loaded: dict[str, Any] = json.loads((ROOT / "out" / "procedure.json").read_text())
    return loaded


def test_a_second_run_works_as_well_as_the_first(runs: list[str]) -> None:
    codes = re.compile(r"P-[0-9A-Z]{8}|127\.0\.0\.1:\d+")
    first, second = (codes.sub("", run) for run in runs)
    assert first == second


@pytest.mark.parametrize(
    "text",
    [
        "pent-4-en-1-yl beta-lactoside",
        "2 g of product, charged to LECTIN-07",
        "Why this way",
        "it is made first from the free sugar",
        "On the shelf",
        "LOA-3 is the alpha anomer",
        "CLO-1 is another sugar",
        "BFE-2 is quarantined",
        "46.5 % as BF3 = 97.33 %",
        "Adiabatic rise: about 151 K",
        "90.26 mmol of acid, 99.3 mmol of bicarbonate, carbon dioxide to 2.21 L",
        "open 400 mL beaker",
        "Water counted: 0.1436 mmol, 0.53 % of the promoter, 1.59 % of the donor",
        "No iodine or N-iodosuccinimide on this product",
        "No hydrogenolysis on this product",
        "drug precursor",
        "H314 Causes severe skin burns",
        "hazards not established: handle as hazardous",
        "2000 mg from the whole route (1627 to 2373 mg)",
        "433.1680",
        "labplan is a planning aid",
        "out/sheet.html",
    ],
)
def test_the_demo_prints(text: str, runs: list[str]) -> None:
    flat = re.sub(r"\s+", " ", runs[0])
    assert text in flat


# DEMO figures, worked by hand from labels and molar masses (see tests/checks/test_demo_figures).
@pytest.mark.parametrize(
    ("bottle", "planned", "real", "amount_mmol", "weighed"),
    [
        ("LAC-1 S1", "1.000", "1.000", "11.2817", "4.106 g"),
        ("AC2-1 AC", "13.000", "13.021", "146.8965", "14.0 mL"),
        ("NAC-1 S2", "1.000", "1.000", "11.2837", "935 mg"),
        ("stage 1", "1.000", "1.000", "9.0246", "6.249 g"),
        ("PEN-1 FC1", "1.500", "1.500", "13.5396", "1.40 mL"),
        ("BFE-1 DB", "3.000", "3.001", "27.0797", "3.51 mL"),
        ("stage 2", "1.000", "1.000", "5.4148", "3.816 g"),
        ("NAM-1 FC2", "0.700", "0.703", "3.8046", "0.87 mL"),
    ],
)
def test_the_table_of_charges_is_as_worked_by_hand(
    bottle: str, planned: str, real: str, amount_mmol: str, weighed: str, runs: list[str]
) -> None:
    pattern = rf"{bottle}\s+{planned}: {real}\s+{amount_mmol}\s+{weighed}"
    assert re.search(pattern, runs[0])


def test_nothing_is_wider_than_the_terminal(runs: list[str]) -> None:
    assert max(map(len, runs[0].splitlines())) <= 80


def test_the_sheet_is_left(runs: list[str]) -> None:
    sheet = (ROOT / "out" / "sheet.html").read_text()
    assert "6.249 g" in sheet
    assert "BFE-1" in sheet
    assert (ROOT / "out" / "sheet.pdf").read_bytes().startswith(b"%PDF-")


HYDRATE = Formula("C12H22O11").mass + Formula("H2O").mass
ETHERATE = Formula("C4H10OBF3").mass


@pytest.mark.parametrize(
    ("stage", "key", "molar_mass", "share", "density"),
    [
        (0, "sugar", HYDRATE, 0.990, None),
        (0, "anhydride", Formula("C4H6O3").mass, 0.990, 1.082),
        (0, "reagent", Formula("C2H3O2Na").mass, 0.990, None),
        (1, "donor", Formula("C28H38O19").mass, 0.980, None),
        (1, "acceptor", Formula("C5H10O").mass, 0.985, 0.8457),
        (1, "promoter", ETHERATE, 0.465 * ETHERATE / Formula("BF3").mass, 1.125),
        (2, "base", Formula("CH3ONa").mass, 0.25, 0.945),
    ],
)
def test_masses_agree_with_an_independent_library(
    stage: int,
    key: str,
    molar_mass: float,
    share: float,
    density: float | None,
    answer: dict[str, Any],
) -> None:
    """molmass, with atomic weights of its own, gets the weighed amount from the printed mmol."""
    charges = answer["document"]["route"]["stages"][stage]["charges"]
    (charge,) = (c for c in charges if c["key"] == key)
    mass_mg = float(charge["amount_mmol"]) * molar_mass / share
    assert float(charge["mass_mg"]) == pytest.approx(mass_mg, rel=8e-5)
    if density is not None:
        assert float(charge["volume_ml"]) == pytest.approx(mass_mg / 1000 / density, rel=8e-5)


def test_the_product_mass_agrees_with_an_independent_library(answer: dict[str, Any]) -> None:
    target = answer["document"]["target"]
    last = answer["document"]["route"]["stages"][-1]
    assert target["formula"] == "C17H30O11"
    product = float(last["scale_mmol"]) * 0.90 * Formula("C17H30O11").mass
    assert float(last["expected"]["mass_mg"]) == pytest.approx(product, rel=5e-5)
