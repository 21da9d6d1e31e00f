"""What is accepted over HTTP and then not planned: refused for its chemistry, or short of stock."""

from typing import Any

import pytest

from inventory.models import Balance, Bottle, Hold
from inventory.services import HoldLine, hold_lines
from labplan.base import clock
from tests.api import targets
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

BF3 = "boron-trifluoride-diethyl-etherate"
FREE_SERINE = "O(C[C@H]({})C(=O){})[C@@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O"
CBZ = "NC(=O)OCc3ccccc3"
NO_ACCEPTOR = ["acceptor_not_planned"] * 3  # a reason against each promoter
# SMILES -> the codes of all reasons, in order
REFUSED_TARGETS = {
    "alpha glucoside": (targets.ALPHA_OCTYL, ["wrong_relation_1_2_cis"]),
    "beta mannoside": (targets.BETA_MANNOSIDE, ["wrong_relation_1_2_cis"]),
    "alpha fucoside": (targets.FUCOSIDE, ["residue_not_planned", "wrong_relation_1_2_cis"]),
    "partly acetylated": (targets.PARTLY_ACETYLATED, ["partly_acetylated"]),
    "tertiary alcohol": (targets.glucoside("C(C)(CC)C"), NO_ACCEPTOR),
    "phenol": (targets.glucoside("c2ccccc2"), NO_ACCEPTOR),
    "diol": (targets.glucoside("CCCCO"), ["several_acceptor_hydroxyls"]),
    "Boc-amino alcohol": (
        targets.glucoside("CCNC(=O)OC(C)(C)C"),
        ["group_does_not_survive", "group_does_not_survive"],
    ),
    "amino alcohol": (targets.glucoside("CCN"), ["group_does_not_survive"]),
    "glycoside of N-acetylglucosamine": (
        targets.GLCNAC,
        ["no_participating_group", "not_acetates"],
    ),
    "cellobioside": (targets.CELLOBIOSIDE_FREE, ["residue_unknown"]),
    "free sugar on Fmoc-serine": (
        FREE_SERINE.format(targets.FMOC, "O"),
        ["group_does_not_survive_deacetylation", "acid_binds_promoter", "acid_binds_promoter"],
    ),
    "free sugar on Fmoc-serine benzyl ester": (
        FREE_SERINE.format(targets.FMOC, "OCc5ccccc5"),
        ["group_does_not_survive_deacetylation", "group_does_not_survive_deacetylation"],
    ),
    "free sugar on Cbz-serine": (
        FREE_SERINE.format(CBZ, "O"),
        ["beta_elimination", "acid_binds_promoter", "acid_binds_promoter"],
    ),
}

# SMILES, kinds of the stages
PLANNED_TARGETS = {
    "alpha mannoside": (targets.ALPHA_MANNOSIDE, ["coupling"]),
    "free octyl glucoside": (targets.FREE_OCTYL, ["coupling", "deacetylation"]),
    "octyl lactoside": (targets.LACTOSIDE, ["acetylation", "coupling"]),
    "Fmoc-serine": (targets.glucoside(f"C[C@H]({targets.FMOC})C(=O)O"), ["coupling"]),
    "Fmoc-threonine, a secondary alcohol": (
        targets.glucoside(f"[C@H](C)[C@H]({targets.FMOC})C(=O)O"),
        ["coupling"],
    ),
    "Cbz-serine benzyl ester": (
        targets.glucoside(f"C[C@H]({CBZ})C(=O)OCc5ccccc5"),
        ["coupling"],
    ),
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
    assert all(reason["detail"][0].isupper() for reason in shown["reasons"])
    assert all(len(reason["detail"]) >= 30 for reason in shown["reasons"])
    document = shown["document"]
    assert (document["verdict"], document["route"]) == ("not_plannable", None)
    assert document["reasons"] == shown["reasons"]
    assert not shown["actions"]
    assert_nothing_held(lab, before, shown)


def test_the_alpha_glucoside_is_told_which_donor_makes_it_elsewhere(lab: Laboratory) -> None:
    (reason,) = order_and_plan(lab, target_smiles=targets.ALPHA_OCTYL)["reasons"]
    assert "1,2-cis" in reason["detail"]
    assert "the acetate at C-2 directs the alcohol to the 1,2-trans side" in reason["detail"]
    assert "Elsewhere this is made with an ether-protected glucosyl donor." in reason["detail"]


def test_the_boc_group_is_named_as_what_is_cleaved(lab: Laboratory) -> None:
    boc = targets.glucoside("CCNC(=O)OC(C)(C)C")
    strong, catalytic = order_and_plan(lab, target_smiles=boc)["reasons"]
    assert strong["detail"] == "A strong Lewis acid takes off Boc."
    assert "Boc" in catalytic["detail"]


@pytest.mark.parametrize("name", PLANNED_TARGETS)
def test_what_was_widened_is_planned_with_its_stages(name: str, lab: Laboratory) -> None:
    smiles, kinds = PLANNED_TARGETS[name]
    shown = order_and_plan(lab, target_smiles=smiles, product_mass_g="1.000")
    assert (shown["state"], shown["reasons"]) == ("planned", [])
    assert [stage["kind"] for stage in shown["document"]["route"]["stages"]] == kinds
    assert shown["reservation"]


def test_a_secondary_alcohol_is_planned_and_only_the_shelf_is_short_of_it(lab: Laboratory) -> None:
    shown = order_and_plan(lab, target_smiles=targets.glucoside("C2CCCCC2"))
    assert (shown["state"], shown["document"]["verdict"]) == ("short", "plannable")
    (reason,) = shown["reasons"]
    assert "there is no bottle of cyclohexanol on the shelf" in reason["detail"]


@pytest.mark.parametrize(
    ("wish", "code"),
    [
        ({"promoter": "bismuth-triflate", "solvent": "toluene"}, "no_such_method"),
        ({"promoter": "sodium-chloride"}, "no_such_method"),
        ({"solvent": "methanol"}, "no_such_method"),
    ],
)
def test_a_wish_that_no_method_knows_is_refused_with_those_that_are_known(
    wish: dict[str, str], code: str, lab: Laboratory
) -> None:
    before = lab.counts()
    shown = order_and_plan(lab, **wish)
    (reason,) = shown["reasons"]
    assert (shown["state"], reason["code"]) == ("refused", code)
    assert " in ".join(wish.values()) in reason["detail"]
    assert f"{BF3} in dichloromethane, toluene, acetonitrile" in reason["detail"]
    assert_nothing_held(lab, before, shown)


@pytest.mark.parametrize(
    ("promoter", "solvent", "bottles"),
    [
        (BF3, "toluene", {"BFE-1", "TOL-1"}),
        (BF3, "acetonitrile", {"BFE-1", "MEC-1"}),
        ("indium-tribromide", "dichloromethane", {"INB-1", "DCM-1"}),
        ("bismuth-triflate", "acetonitrile", {"BIT-1", "MEC-1"}),
    ],
)
def test_a_wish_is_followed(
    promoter: str, solvent: str, bottles: set[str], lab: Laboratory
) -> None:
    shown = order_and_plan(lab, promoter=promoter, solvent=solvent)
    assert (shown["state"], shown["promoter"], shown["solvent"]) == ("planned", promoter, solvent)
    (stage,) = shown["document"]["route"]["stages"]
    roles = {c["role"]: c["substance"] for c in stage["charges"] if c["group"] == "reaction"}
    assert (roles["promoter"], roles["solvent"]) == (promoter, solvent)
    assert bottles <= {c["bottle"] for c in stage["charges"]}


def test_a_free_acid_and_a_catalytic_promoter_do_not_go_together(lab: Laboratory) -> None:
    serine = targets.glucoside(f"C[C@H]({targets.FMOC})C(=O)O")
    shown = order_and_plan(lab, target_smiles=serine, promoter="indium-tribromide")
    (reason,) = shown["reasons"]
    assert (shown["state"], reason["code"]) == ("refused", "acid_binds_promoter")


def test_without_bf3_etherate_the_next_promoter_is_taken_and_it_is_said(lab: Laboratory) -> None:
    Bottle.objects.filter(code="BFE-1").update(status=Bottle.Status.QUARANTINED)
    shown = order_and_plan(lab)
    document = shown["document"]
    assert (shown["state"], document["route"]["method"]) == ("planned", "peracetate-inbr3")
    other = next(o for o in document["other_routes"] if o["method"] == "peracetate-bf3")
    assert other["available"] is False
    assert "BFE-1 is quarantined" in other["shortages"][0]["detail"]
    assert any("indium(III) bromide" in line for line in document["route"]["why"])


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
    assert "penta-O-acetyl-beta-D-glucopyranose" in shown["reasons"][0]["detail"]
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
    assert acceptor.startswith("coupling, acceptor: 10.86 mmol of 1-octanol needed")
    assert "OCT-1 holds 0.1 mL that can be used" in acceptor
    assert promoter.startswith(
        "coupling, promoter: 21.72 mmol of boron trifluoride diethyl etherate needed"
    )
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
    for sugar, amount in (("GLC-1", 999_000_000), ("GLC-2", 499_000_000)):
        take_away(lab, sugar, amount)
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    lab.run_outbox()
    shown = client.get(accepted["Location"]).json()
    assert shown["state"] == "short"
    assert shown["reasons"][0]["detail"].startswith(
        "coupling, donor: 7.238 mmol of 1,2,3,4,6-penta-O-acetyl"
    )
    sheet = client.get(shown["links"]["sheet_html"]).content.decode()
    assert all(code in sheet for code in ("GPA-1", "GPA-2"))
    assert "no single bottle holds enough" in sheet


def test_without_the_peracetate_it_is_made_from_the_free_sugar(lab: Laboratory) -> None:
    """The glucose already open and first to expire; the rest of the peracetate stays."""
    take_away(lab, "GPA-1", 99_000_000)
    take_away(lab, "GPA-2", 49_500_000)
    shown = order_and_plan(lab)
    assert shown["state"] == "planned"
    first, second = shown["document"]["route"]["stages"]
    assert (first["kind"], second["kind"]) == ("acetylation", "coupling")
    assert first["charges"][0]["bottle"] in {"GLC-1", "GLC-2"}
    donor = next(c for c in second["charges"] if c["key"] == "donor")
    assert (donor["bottle"], donor["from_stage"]) == (None, 1)
    passed = {p["bottle"]: p["reason"] for p in shown["document"]["route"]["passed_over"]}
    assert "is needed" in passed["GPA-1"]


def take_away(lab: Laboratory, bottle: str, amount: int) -> None:
    """Hold an amount for the other project."""
    hold_lines(
        actor=lab.actor("INES"), project_id=lab.project("GLYCAN-12").pk, purpose="taken before",
        expires_on=clock.today(), lines=[HoldLine(bottle, amount, str(amount), "base unit")],
    )  # fmt: skip
