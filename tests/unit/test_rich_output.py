"""What the demo prints fits a terminal of 80 columns and says all that counts."""

import io
from typing import Any

import pytest
from rich.cells import cell_len
from rich.console import Console

from inventory.models import Bottle
from labplan.procedures.demo.printing import print_procedure
from tests.laboratory import OCTYL_GLUCOSIDE, PROCEDURES, Laboratory, octyl_order

ALPHA = OCTYL_GLUCOSIDE.replace("O[C@@H]1O", "O[C@H]1O", 1)
DECYL = "CC" + OCTYL_GLUCOSIDE


def planned(lab: Laboratory, **changes: Any) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    """A procedure and the bottles of its reaction, as the demo reads them."""
    client = lab.client()
    location = client.post(PROCEDURES, octyl_order(**changes))["Location"]
    lab.run_outbox()
    procedure = client.get(location).json()
    route = procedure["document"]["route"]
    stages = route["stages"] if route else []
    codes = [c["bottle"] for s in stages for c in s["charges"] if c["group"] == "reaction"]
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
    ],
    ids=["demo", "large", "small", "by acceptor", "decyl", "refused", "short"],
)
def test_no_line_is_wider_than_the_terminal(
    changes: dict[str, Any], width: int, lab: Laboratory
) -> None:
    text = printed(*planned(lab, **changes), width=width)
    assert len(text.splitlines()) > 5
    assert too_wide(text, width) == []


def test_every_amount_and_bottle_is_printed_whole(lab: Laboratory) -> None:
    procedure, shelf = planned(lab)
    text = printed(procedure, shelf)
    for charge in procedure["document"]["route"]["stages"][0]["charges"]:
        lines = [line for line in text.splitlines() if charge["amount_text"] in line]
        where = f"{charge['bottle']} {charge['place']}" if charge["bottle"] else "supply"
        assert any(where in line for line in lines), charge["key"]
    for bottle in shelf:
        unit = "volume_ml" if bottle["measured_by"] == "volume" else "mass_mg"
        lines = [line for line in text.splitlines() if line.startswith(bottle["code"])]
        assert any(bottle[f"usable_{unit}"] in line for line in lines), bottle["code"]


def test_every_step_statement_and_caution_is_printed(lab: Laboratory) -> None:
    procedure, shelf = planned(lab)
    text = " ".join(printed(procedure, shelf).split())
    document = procedure["document"]
    steps = document["route"]["stages"][0]["steps"]
    for step in steps:
        assert f"{step['number']}. {step['title']}. " + " ".join(step["text"].split()) in text
    for line in (*document["route"]["why"], *document["cautions"]):
        assert " ".join(line.split()) in text
    for warning in document["route"]["warnings"]:
        assert f"{warning['severity']}: {warning['detail']}" in text
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
    assert f"wrong_relation_1_2_cis: {procedure['reasons'][0]['detail']}" in text
    assert "is refused" in text


def test_a_shortage_is_printed_with_its_reason(lab: Laboratory) -> None:
    Bottle.objects.filter(code="BFE-1").update(status=Bottle.Status.QUARANTINED)
    procedure, shelf = planned(lab)
    text = " ".join(printed(procedure, shelf).split())
    assert "Short of boron trifluoride diethyl etherate: no bottle is fit" in text
    assert "BFE-1 is quarantined" in text


def test_square_brackets_of_a_smiles_are_no_markup(lab: Laboratory) -> None:
    """A target without a name is printed as its SMILES, whole."""
    unnamed = OCTYL_GLUCOSIDE.replace("CCCCCCCCO", "CCCCCCCO", 1)
    procedure, shelf = planned(lab, target_smiles=unnamed)
    assert procedure["document"]["target"]["name"] is None
    joined = "".join(part.strip("│ ") for part in printed(procedure, shelf).splitlines())
    assert procedure["document"]["target"]["smiles"] in joined
