"""What the demo prints fits a terminal of 80 columns and says all that counts."""

import io
from decimal import Decimal
from typing import Any

import pytest
from rich.cells import cell_len
from rich.console import Console

from inventory.models import Bottle
from labplan.procedures.printing import print_procedure
from tests.api import targets
from tests.laboratory import OCTYL_GLUCOSIDE, PROCEDURES, Laboratory, octyl_order

ALPHA = OCTYL_GLUCOSIDE.replace("O[C@@H]1O", "O[C@H]1O", 1)
DECYL = "CC" + OCTYL_GLUCOSIDE
LACTOSIDE = targets.LACTOSIDE_FREE
SERINE = targets.glucoside(f"C[C@H]({targets.FMOC})C(=O)O")


def planned(lab: Laboratory, **changes: Any) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    """A procedure and the bottles of its reaction, as the demo reads them."""
    client = lab.client()
    location = client.post(PROCEDURES, octyl_order(**changes))["Location"]
    lab.run_outbox()
    procedure = client.get(location).json()
    route = procedure["document"]["route"]
    stages = route["stages"] if route else []
    charges = [c for s in stages for c in s["charges"] if c["group"] == "reaction" and c["bottle"]]
    codes = dict.fromkeys(charge["bottle"] for charge in charges)
    return procedure, [client.get(f"/api/v1/bottles/{code}/").json() for code in codes]


def printed(procedure: dict[str, Any], shelf: list[dict[str, Any]], *, width: int = 80) -> str:
    out = io.StringIO()
    console = Console(
        file=out, width=width, highlight=False, force_terminal=False, color_system=None
    )
    print_procedure(console, procedure, shelf)
    return out.getvalue()


def too_wide(text: str, width: int) -> list[str]:
    return [line for line in text.splitlines() if cell_len(line.rstrip()) > width]


@pytest.mark.parametrize("width", [80, 100, 132])
@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"product_mass_g": "18"},
        {"product_mass_g": "0.2"},
        {"product_mass_g": None, "acceptor_amount_mmol": "12.345678"},
        {"target_smiles": DECYL},
        {"target_smiles": ALPHA},
        {"product_mass_g": "100"},
        {"target_smiles": LACTOSIDE},
        {"target_smiles": LACTOSIDE, "product_mass_g": "0.2", "promoter": "indium-tribromide"},
        {"target_smiles": LACTOSIDE, "product_mass_g": "60"},
        {"target_smiles": SERINE},
    ],
    ids=[
        "octyl",
        "large",
        "small",
        "by acceptor",
        "decyl",
        "refused",
        "short",
        "three stages",
        "indium",
        "three stages short",
        "serine",
    ],
)
def test_no_line_is_wider_than_the_terminal(
    changes: dict[str, Any], width: int, lab: Laboratory
) -> None:
    text = printed(*planned(lab, **changes), width=width)
    assert len(text.splitlines()) > 5
    assert too_wide(text, width) == []


@pytest.mark.parametrize(("smiles", "stages"), [(OCTYL_GLUCOSIDE, 1), (LACTOSIDE, 3)])
def test_every_amount_and_bottle_is_printed_whole(
    smiles: str, stages: int, lab: Laboratory
) -> None:
    procedure, shelf = planned(lab, target_smiles=smiles)
    text = printed(procedure, shelf)
    assert len(procedure["document"]["route"]["stages"]) == stages
    for stage in procedure["document"]["route"]["stages"]:
        for charge in stage["charges"]:
            lines = [line for line in text.splitlines() if charge["amount_text"] in line]
            assert any(where_from(charge) in line for line in lines), charge["key"]
    for bottle in shelf:
        lines = [line for line in text.splitlines() if line.startswith(bottle["code"])]
        assert any(shelf_amount(bottle) in line for line in lines), bottle["code"]


def where_from(charge: dict[str, Any]) -> str:
    if charge["from_stage"]:
        return f"stage {charge['from_stage']} "
    return f"{charge['bottle']} {charge['place']} " if charge["bottle"] else "supply "


def shelf_amount(bottle: dict[str, Any]) -> str:
    """What is free, in mL or in g."""
    if bottle["measured_by"] == "volume":
        return f" {bottle['usable_volume_ml']} mL "
    return f" {(Decimal(bottle['usable_mass_mg']) / 1000).normalize():f} g "


@pytest.mark.parametrize("smiles", [OCTYL_GLUCOSIDE, LACTOSIDE], ids=["octyl", "three stages"])
def test_every_step_statement_and_caution_is_printed(smiles: str, lab: Laboratory) -> None:
    procedure, shelf = planned(lab, target_smiles=smiles)
    text = " ".join(printed(procedure, shelf).split())
    document = procedure["document"]
    for stage in document["route"]["stages"]:
        for step in stage["steps"]:
            assert f"{step['number']}. {step['title']}. " + " ".join(step["text"].split()) in text
            assert " ".join(step["watch"].split()) in text
        assert f"{stage['expected']['mass_mg']} mg of {stage['product']['name']}" in text
    for line in (*document["route"]["why"], *document["cautions"]):
        assert " ".join(line.split()) in text
    for warning in document["route"]["warnings"]:
        assert f"{warning['severity'].upper()}: {warning['detail']}" in text
    assert bool(document["route"]["warnings"]) is (smiles == LACTOSIDE)
    for hazard in document["hazards"]:
        for statement in hazard["hazard_statements"]:
            assert f"{statement['code']} {statement['text'].rstrip('.')}" in text
        if not hazard["established"]:
            assert f"UNKNOWN: {hazard['name']} hazards not established" in text
    for ion in document["expectations"]["ions"]:
        assert ion["mz"] in text


def test_a_refusal_is_printed_with_its_reason(lab: Laboratory) -> None:
    procedure, shelf = planned(lab, target_smiles=ALPHA)
    text = " ".join(printed(procedure, shelf).split())
    assert f"Why not - {procedure['reasons'][0]['detail']}" in text
    assert "is refused" in text


def test_a_shortage_is_printed_with_its_reason(lab: Laboratory) -> None:
    Bottle.objects.filter(code="BFE-1").update(status=Bottle.Status.QUARANTINED)
    procedure, shelf = planned(lab, promoter="boron-trifluoride-diethyl-etherate")
    text = " ".join(printed(procedure, shelf).split())
    assert "Short, coupling: 21.72 mmol of boron trifluoride diethyl etherate; no bottle" in text
    assert "BFE-1 is quarantined" in text


def test_square_brackets_of_a_smiles_are_no_markup(lab: Laboratory) -> None:
    """A target without a name is printed as its SMILES, whole."""
    unnamed = OCTYL_GLUCOSIDE.replace("CCCCCCCCO", "CCCCCCCO", 1)
    procedure, shelf = planned(lab, target_smiles=unnamed)
    assert procedure["document"]["target"]["name"] is None
    joined = "".join(part.strip("│ ") for part in printed(procedure, shelf).splitlines())
    assert procedure["document"]["target"]["smiles"] in joined
