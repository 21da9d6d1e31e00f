"""What is accepted over HTTP and then not planned: refused for its chemistry, or short of stock."""

from typing import Any

import pytest

from inventory.models import Balance, Bottle, Hold
from inventory.services import HoldLine, hold_lines
from labplan.base import clock
from tests.api import targets
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

# SMILES -> the codes of all reasons, in order
REFUSED_TARGETS = {
    "alpha glucoside": (targets.ALPHA_OCTYL, ["wrong_relation_1_2_cis"]),
    "alpha mannoside": (targets.ALPHA_MANNOSIDE, ["residue_not_planned"]),
    "beta mannoside": (targets.BETA_MANNOSIDE, ["residue_not_planned", "wrong_relation_1_2_cis"]),
    "free sugar hydroxyls": (targets.FREE_OCTYL, ["free_hydroxyls"]),
    "secondary alcohol": (targets.glucoside("C2CCCCC2"), ["acceptor_not_planned"]),
    "tertiary alcohol": (targets.glucoside("C(C)(CC)CC"), ["acceptor_not_planned"]),
    "phenol": (targets.glucoside("c2ccccc2"), ["acceptor_not_planned"]),
    "diol": (targets.glucoside("CCCCO"), ["several_acceptor_hydroxyls"]),
    "Boc-amino alcohol": (
        targets.glucoside("CCNC(=O)OC(C)(C)C"),
        ["group_does_not_survive"],
    ),
    "amino alcohol": (targets.glucoside("CCN"), ["group_does_not_survive"]),
    "glycoside of N-acetylglucosamine": (targets.GLCNAC, ["no_participating_group"]),
    "lactoside": (targets.LACTOSIDE, ["oligosaccharide_not_planned"]),
}


def order_and_plan(lab: Laboratory, **changes: Any) -> dict[str, Any]:
    """Ask, let the outbox run, and read the answer."""
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order(**changes))
    assert accepted.status_code == 202
    assert lab.run_outbox() == 1
    shown: dict[str, Any] = client.get(accepted["Location"]).json()
    return shown


def assert_nothing_held(lab: Laboratory, before: tuple[int, ...], shown: dict[str, Any]) -> None:
    """One procedure and its document more; no reservation, no movement, no hold."""
    procedures, documents, reservations, movements = before
    assert lab.counts() == (procedures + 1, documents + 1, reservations, movements)
    assert shown["reservation"] is None
    assert Hold.objects.count() == 1  # the one of the scenario
    assert list(Balance.objects.filter(held__gt=0).values_list("bottle__code", flat=True)) == [
        "LOA-1"
    ]


@pytest.mark.parametrize("name", REFUSED_TARGETS)
def test_a_target_the_method_cannot_make_is_refused_with_every_reason(
    name: str, lab: Laboratory
) -> None:
    smiles, codes = REFUSED_TARGETS[name]
    before = lab.counts()
    shown = order_and_plan(lab, target_smiles=smiles)
    assert shown["state"] == "refused"
    assert [reason["code"] for reason in shown["reasons"]] == codes
    assert all(len(reason["detail"]) > 30 for reason in shown["reasons"])
    document = shown["document"]
    assert (document["verdict"], document["route"]) == ("not_plannable", None)
    assert document["reasons"] == shown["reasons"]
    assert shown["actions"] == []
    assert_nothing_held(lab, before, shown)


def test_the_alpha_glucoside_is_told_which_donor_makes_it_elsewhere(lab: Laboratory) -> None:
    (reason,) = order_and_plan(lab, target_smiles=targets.ALPHA_OCTYL)["reasons"]
    assert "1,2-cis" in reason["detail"]
    assert "the acetate at C-2 directs the alcohol to the 1,2-trans side" in reason["detail"]
    assert "an ether-protected donor under in-situ anomerisation" in reason["detail"]


def test_the_boc_group_is_named_as_what_is_cleaved(lab: Laboratory) -> None:
    (reason,) = order_and_plan(lab, target_smiles=targets.glucoside("CCNC(=O)OC(C)(C)C"))["reasons"]
    assert "Boc are cleaved by BF3" in reason["detail"]


@pytest.mark.parametrize(
    "scale",
    [{"product_mass_g": "0.001"}, {"product_mass_g": None, "acceptor_amount_mmol": "0.001"}],
)
def test_what_cannot_be_weighed_is_refused(scale: dict[str, Any], lab: Laboratory) -> None:
    before = lab.counts()
    shown = order_and_plan(lab, **scale)
    assert shown["state"] == "refused"
    assert [reason["code"] for reason in shown["reasons"]] == ["below_least_weighable"]
    assert "under 20 mg" in shown["reasons"][0]["detail"]
    assert "Penta-O-acetyl-beta-D-glucopyranose" in shown["reasons"][0]["detail"]
    assert_nothing_held(lab, before, shown)


def test_every_line_the_shelf_is_short_of_is_listed_at_once(lab: Laboratory) -> None:
    Bottle.objects.filter(code="BFE-1").update(status=Bottle.Status.QUARANTINED)
    octanol = lab.bottle("OCT-1")
    usable = octanol.balance.on_hand - octanol.balance.held - octanol.heel
    take_away(lab, "OCT-1", usable - 100_000)
    before = lab.counts()
    shown = order_and_plan(lab)
    assert shown["state"] == "short"
    assert [reason["code"] for reason in shown["reasons"]] == ["short", "short"]
    acceptor, promoter = (reason["detail"] for reason in shown["reasons"])
    assert acceptor.startswith("acceptor: 10.86 mmol of 1-octanol needed")
    assert "OCT-1 holds 0.1 mL that can be used" in acceptor
    assert promoter.startswith("promoter: 21.72 mmol of boron trifluoride diethyl etherate needed")
    assert "BFE-1 is quarantined" in promoter
    assert "BFE-2 is quarantined" in promoter
    shortages = shown["document"]["route"]["shortages"]
    assert [line["role"] for line in shortages] == ["acceptor", "promoter"]
    assert shown["document"]["route"]["stages"] == []
    procedures, documents, reservations, movements = before
    assert lab.counts() == (procedures + 1, documents + 1, reservations, movements)
    assert shown["reservation"] is None
    assert lab.bottle("OCT-1").balance.held == usable - 100_000


def test_more_than_any_bottle_holds_is_short_on_the_sheet_too(lab: Laboratory) -> None:
    take_away(lab, "GPA-1", 99_000_000)
    take_away(lab, "GPA-2", 49_500_000)
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    lab.run_outbox()
    shown = client.get(accepted["Location"]).json()
    assert shown["state"] == "short"
    assert shown["reasons"][0]["detail"].startswith("donor: 7.238 mmol of 1,2,3,4,6-penta-O-acetyl")
    sheet = client.get(shown["links"]["sheet_html"]).content.decode()
    assert "What the shelf is short of" in sheet
    assert "GPA-1" in sheet


def take_away(lab: Laboratory, bottle: str, amount: int) -> None:
    """Hold an amount for the other project."""
    hold_lines(
        actor=lab.actor("INES"), project_id=lab.project("GLYCAN-12").pk, purpose="taken before",
        expires_on=clock.today(), lines=[HoldLine(bottle, amount, str(amount), "base unit")],
    )  # fmt: skip
