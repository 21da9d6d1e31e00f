"""`manage.py demo` as a user runs it: another process, nothing set, twice."""

import json
import os
import re
import subprocess
import sys
from decimal import Decimal
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
        cwd=ROOT, env={**bare, "COLUMNS": "80"}, capture_output=True, text=True, timeout=60,
        check=False,
    )  # fmt: skip
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
        "octyl 2,3,4,6-tetra-O-acetyl-beta-D-glucopyranoside",
        "2 g of product, charged to LECTIN-07",
        "Why this way",
        "On the shelf",
        "BFE-2 is quarantined",
        "46.5 % as BF3 = 97.33 %",
        "Steps",
        "H314 Causes severe skin burns",
        "hazards not established: handle as hazardous",
        "What to expect",
        "483.2201",
        "labplan is a planning aid",
        "out/sheet.html",
    ],
)
def test_the_demo_prints(text: str, runs: list[str]) -> None:
    flat = re.sub(r"\s+", " ", runs[0])
    assert text in flat


@pytest.mark.parametrize(
    ("bottle", "planned", "real", "amount_mmol", "weighed"),
    [
        ("GPA-1 D1", "1.000", "1.000", "7.2384", "2.854 g"),
        ("OCT-1 FC1", "1.500", "1.499", "10.8484", "1.71 mL"),
        ("BFE-1 DB", "3.000", "2.995", "21.6792", "2.81 mL"),
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
    assert "2.854 g" in sheet
    assert "BFE-1" in sheet


@pytest.mark.parametrize(
    ("key", "formula", "fraction", "density"),
    [
        ("donor", "C16H22O11", Decimal("0.990"), None),
        ("acceptor", "C8H18O", Decimal(1), Decimal("0.8262")),
        ("promoter", "C4H10OBF3", None, Decimal("1.125")),
    ],
)
def test_masses_agree_with_an_independent_library(
    key: str, formula: str, fraction: Decimal | None, density: Decimal | None,
    answer: dict[str, Any],
) -> None:  # fmt: skip
    """molmass, with atomic weights of its own, gets the weighed amount from the printed mmol."""
    (charge,) = (c for c in answer["document"]["route"]["stages"][0]["charges"] if c["key"] == key)
    molar_mass = Formula(formula).mass
    share = float(fraction) if fraction else 0.465 * molar_mass / Formula("BF3").mass
    mass_mg = float(charge["amount_mmol"]) * molar_mass / share
    assert float(charge["mass_mg"]) == pytest.approx(mass_mg, rel=5e-5)
    if density is not None:
        volume_ml = mass_mg / 1000 / float(density)
        assert float(charge["volume_ml"]) == pytest.approx(volume_ml, rel=5e-5)


def test_the_product_mass_agrees_with_an_independent_library(answer: dict[str, Any]) -> None:
    target = answer["document"]["target"]
    expected = answer["document"]["route"]["stages"][0]["expected"]
    scale = float(answer["document"]["route"]["stages"][0]["scale_mmol"])
    assert target["formula"] == "C22H36O10"
    product = scale * 0.60 * Formula("C22H36O10").mass
    assert float(expected["mass_mg"]) == pytest.approx(product, rel=5e-5)
