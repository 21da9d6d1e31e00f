"""The demo target over HTTP, figure by figure, and its twins: short, refused, led into traps."""

import uuid
from decimal import Decimal
from typing import Any

import pytest

from inventory.models import Bottle, Hold, Movement, Reservation
from inventory.services import HoldLine, hold_lines
from labplan.base import clock
from tests.api import targets
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

DEMO = {"target_smiles": targets.LACTOSIDE_FREE}
ALLYL = "CC=C"
TRAPS = {"DCM-3", "CHL-1", "BFE-2", "CLO-1", "LOA-3", "MS-2"}


def order_and_plan(lab: Laboratory, **changes: Any) -> dict[str, Any]:
    """Ask, let the outbox run, and read the answer."""
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order(**changes), key=uuid.uuid4().hex)
    assert accepted.status_code == 202
    assert lab.run_outbox() == 1
    shown: dict[str, Any] = client.get(accepted["Location"]).json()
    return shown


@pytest.fixture
def demo(lab: Laboratory) -> dict[str, Any]:
    """The demo's procedure as its detail shows it: 2.000 g of pent-4-en-1-yl beta-lactoside."""
    shown = order_and_plan(lab, **DEMO)
    assert (shown["state"], shown["reasons"]) == ("planned", [])
    return shown


def stages_of(shown: dict[str, Any]) -> list[dict[str, Any]]:
    stages: list[dict[str, Any]] = shown["document"]["route"]["stages"]
    return stages


def charges_of(stage: dict[str, Any]) -> dict[str, dict[str, Any]]:
    return {charge["key"]: charge for charge in stage["charges"]}


def test_the_demo_is_planned_in_three_stages(demo: dict[str, Any]) -> None:
    document = demo["document"]
    assert document["target"]["name"] == "pent-4-en-1-yl beta-lactoside"
    assert document["target"]["formula"] == "C17H30O11"
    assert document["target"]["molar_mass_g_per_mol"] == "410.416"
    assert document["coupling"]["donor"]["molar_mass_g_per_mol"] == "678.593"
    assert document["coupling"]["glycoside"]["formula"] == "C31H44O18"
    assert document["coupling"]["glycoside"]["molar_mass_g_per_mol"] == "704.675"
    stages = stages_of(demo)
    assert [stage["kind"] for stage in stages] == ["acetylation", "coupling", "deacetylation"]
    assert [stage["expected"]["yield_pct"] for stage in stages] == ["80", "60", "90"]
    assert [stage["provisional"] for stage in stages] == [False, True, True]
    mass = document["expectations"]["mass_mg"]
    assert mass == {"low": "1627", "planned": "2000", "high": "2373"}


def test_the_acetylation_of_the_demo_is_as_worked_by_hand(demo: dict[str, Any]) -> None:
    """11.2807 mmol of lactose monohydrate; 8 OH at 1.5 and 1 water are 13.0 equiv."""
    stage = stages_of(demo)[0]
    charges = charges_of(stage)
    sugar, anhydride, reagent = (charges[key] for key in ("sugar", "anhydride", "reagent"))
    assert (sugar["bottle"], sugar["mass_mg"], sugar["form"]) == ("LAC-1", "4106.0", "monohydrate")
    assert sugar["amount_mmol"] == "11.2817"
    assert (anhydride["bottle"], anhydride["amount_text"]) == ("AC2-1", "14.0 mL")
    assert anhydride["equivalents_planned"] == "13.000"
    assert Decimal("13") <= Decimal(anhydride["equivalents"]) < Decimal("13.1")
    assert (reagent["bottle"], reagent["mass_mg"]) == ("NAC-1", "935.0")
    assert reagent["amount_text"] == "935 mg"
    assert stage["adiabatic_rise_k"] == "151"
    assert stage["expected"]["mass_mg"] == "6124.6"
    # 6124.55 / 0.980 = 6249.54; worked from the rounded 6124.6 it is 6249.6
    assert stage["expected"]["gross_mass_mg"] == "6249.5"
    codes = {warning["code"] for warning in demo["document"]["route"]["warnings"]}
    assert codes >= {"precursor_chemical", "exotherm"}


def test_the_coupling_of_the_demo_is_as_worked_by_hand(demo: dict[str, Any]) -> None:
    stage = stages_of(demo)[1]
    charges = charges_of(stage)
    donor, acceptor, promoter = (charges[key] for key in ("donor", "acceptor", "promoter"))
    assert (donor["mass_mg"], donor["amount_mmol"]) == ("6249.0", "9.0246")
    assert (donor["bottle"], donor["from_stage"], donor["equivalents"]) == (None, 1, "1.000")
    assert (acceptor["bottle"], acceptor["amount_text"]) == ("PEN-1", "1.40 mL")
    assert (acceptor["equivalents"], acceptor["amount_mmol"]) == ("1.500", "13.5396")
    assert (promoter["bottle"], promoter["amount_text"]) == ("BFE-1", "3.51 mL")
    assert promoter["equivalents"] == "3.001"
    assert abs(Decimal(promoter["amount_mmol"]) - Decimal("27.080")) <= Decimal("0.0005")
    assert promoter["assay"] == "46.5 % as BF3 = 97.33 % (titration)"
    solvent = charges["solvent"]
    assert (solvent["bottle"], solvent["amount_text"]) == ("DCM-1", "91 mL")
    water = {line["charge"]: line["amount_mmol"] for line in stage["water"]["lines"]}
    assert water == {"solvent": "0.1206", "acceptor": "0.0230"}
    assert stage["water"]["total_mmol"] == "0.1436"
    assert stage["water"]["promoter_share_pct"] == "0.53"
    assert stage["water"]["donor_share_pct"] == "1.59"
    assert stage["quench"] == {
        "vessel_ml": 400,
        "acid_mmol": "90.26",
        "bicarbonate_mmol": "99.3",
        "clear_solution_ml": "124",
        "carbon_dioxide_l": "2.21",
    }
    assert (charges["quench_base"]["amount_text"], charges["quench_water"]["amount_text"]) == (
        "8.34 g",
        "91 mL",
    )
    expected = stage["expected"]
    assert expected["mass_mg"] == "3815.6"
    assert (expected["mass_low_mg"], expected["mass_high_mg"]) == ("3180", "4452")


def test_the_deacetylation_of_the_demo_is_as_worked_by_hand(demo: dict[str, Any]) -> None:
    stage = stages_of(demo)[2]
    charges = charges_of(stage)
    assert stage["scale_mmol"] == "5.4148"
    assert (charges["glycoside"]["mass_mg"], charges["glycoside"]["from_stage"]) == ("3815.6", 2)
    assert (charges["solvent"]["bottle"], charges["solvent"]["amount_text"]) == ("MEO-1", "55 mL")
    assert (charges["base"]["bottle"], charges["base"]["amount_text"]) == ("NAM-1", "0.87 mL")
    assert charges["base"]["equivalents_planned"] == "0.700"
    assert (charges["resin"]["bottle"], charges["resin"]["amount_text"]) == ("RES-1", "3 mL")
    assert abs(Decimal(stage["expected"]["mass_mg"]) - 2000) <= Decimal("0.3")


def test_the_ions_of_the_demo_are_those_of_its_structures(demo: dict[str, Any]) -> None:
    ions = {(i["species"], i["ion"]): i["mz"] for i in demo["document"]["expectations"]["ions"]}
    assert ions["glycoside", "[M+Na]+"] == "727.2420"
    assert ions["glycoside", "[M+NH4]+"] == "722.2866"
    assert ions["donor", "[M+Na]+"] == "701.1899"
    assert ions["hemiacetal (donor + water)", "[M+Na]+"] == "659.1794"
    assert ions["product", "[M+Na]+"] == "433.1680"
    assert ions["glycosyl cation", "[M-OAc]+"] == "619.1869"


def test_the_holds_of_the_demo_are_its_charges_in_base_units(
    lab: Laboratory, demo: dict[str, Any]
) -> None:
    """Line for line: micrograms where the bottle is weighed, nanolitres where it is measured."""
    charges = [c for stage in stages_of(demo) for c in stage["charges"] if c["bottle"]]
    reservation = Reservation.objects.get(code=demo["reservation"])
    assert reservation.project.code == "LECTIN-07"
    holds = list(Hold.objects.filter(reservation=reservation).select_related("bottle"))
    holds.sort(key=lambda hold: hold.line)
    expected = [(c["bottle"], base_units(lab, c)) for c in charges]
    assert [(hold.bottle.code, hold.amount) for hold in holds] == expected
    assert len(expected) >= 20
    by_bottle: dict[str, int] = {}
    for code, amount in expected:
        by_bottle[code] = by_bottle.get(code, 0) + amount
    for code, amount in by_bottle.items():
        assert lab.bottle(code).balance.held == amount, code
    assert {code: by_bottle[code] for code in ("LAC-1", "AC2-1", "PEN-1", "BFE-1", "DCM-1")} == {
        "LAC-1": 4_106_000,
        "AC2-1": 14_000_000,
        "PEN-1": 1_400_000,
        "BFE-1": 3_510_000,
        "DCM-1": 95_000_000,  # 91 mL to react in, 4 mL for the syringe of the promoter
    }
    reason = f"procedure {demo['code']}"
    assert Movement.objects.filter(reason=reason, kind="hold").count() == len(expected)


def base_units(lab: Laboratory, charge: dict[str, Any]) -> int:
    if lab.bottle(charge["bottle"]).measured_by == "volume":
        return int(Decimal(charge["volume_ml"]) * 1_000_000)
    return int(Decimal(charge["mass_mg"]) * 1_000)


def test_the_bottle_with_a_hold_on_it_is_named_as_too_small(demo: dict[str, Any]) -> None:
    """2.50 g of the octaacetate, 1.00 g of it held by others, 20 mg that stay in the bottle."""
    passed = {
        (p["bottle"], p["role"]): p["reason"] for p in demo["document"]["route"]["passed_over"]
    }
    assert passed["LOA-1", "donor"].startswith("holds 1.480 g that can be used")


def take_away(lab: Laboratory, bottle: str, amount: int) -> None:
    """Hold an amount for the other project."""
    hold_lines(
        actor=lab.actor("INES"), project_id=lab.project("GLYCAN-12").pk, purpose="taken before",
        expires_on=clock.today(), lines=[HoldLine(bottle, amount, str(amount), "base unit")],
    )  # fmt: skip


def test_without_fit_dichloromethane_the_demo_is_short_of_it(lab: Laboratory) -> None:
    """All of DCM-1 and 2.40 L of DCM-2 are others'; DCM-3 has ethanol in it."""
    first = lab.bottle("DCM-1")
    take_away(lab, "DCM-1", first.balance.on_hand - first.balance.held - first.heel)
    take_away(lab, "DCM-2", 2_400_000_000)
    before = lab.counts()
    shown = order_and_plan(lab, **DEMO)
    assert (shown["state"], shown["reservation"]) == ("short", None)
    (reason,) = shown["reasons"]
    assert reason["code"] == "short"
    assert reason["detail"].startswith("coupling, solvent: 91 mL of dichloromethane needed")
    assert "DCM-1 holds 0 mL that can be used" in reason["detail"]
    assert "DCM-2 holds 50 mL that can be used" in reason["detail"]
    assert "DCM-3 is stabilised with ethanol" in reason["detail"]
    (shortage,) = shown["document"]["route"]["shortages"]
    assert (shortage["stage"], shortage["role"]) == ("coupling", "solvent")
    assert shortage["substance"] == "dichloromethane"
    assert shown["document"]["verdict"] == "plannable"
    assert stages_of(shown) == []
    procedures, documents, reservations, movements = before
    assert lab.counts() == (procedures + 1, documents + 1, reservations, movements)


@pytest.mark.parametrize(("left_nl", "end"), [(95_000_000, "planned"), (94_999_000, "short")])
def test_a_microlitre_of_dichloromethane_decides(left_nl: int, end: str, lab: Laboratory) -> None:
    """91 and 4 mL are wanted: with 95 mL free the demo is planned, a microlitre less is short."""
    first, second = lab.bottle("DCM-1"), lab.bottle("DCM-2")
    take_away(lab, "DCM-1", first.balance.on_hand - first.balance.held - first.heel)
    free = second.balance.on_hand - second.balance.held - second.heel
    take_away(lab, "DCM-2", free - left_nl)
    held = lab.bottle("DCM-2").balance.held
    assert order_and_plan(lab, **DEMO)["state"] == end
    taken = 95_000_000 if end == "planned" else 0
    assert lab.bottle("DCM-2").balance.held == held + taken


REFUSED_TWINS = {
    "octyl alpha-L-fucopyranoside": (
        targets.FUCOSIDE_FREE,
        "wrong_relation_1_2_cis",
        "a benzyl-protected fucosyl donor",
    ),
    "Fmoc-serine with a free sugar": (
        f"O(C[C@H]({targets.FMOC})C(=O)O)[C@@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O",
        "group_does_not_survive_deacetylation",
        "deacetylate after the peptide is assembled",
    ),
    "a beta-D-mannoside": (
        targets.BETA_MANNOSIDE_FREE,
        "wrong_relation_1_2_cis",
        "a 4,6-benzylidene mannosyl sulfoxide or trichloroacetimidate",
    ),
}


@pytest.mark.parametrize("name", REFUSED_TWINS)
def test_a_refused_twin_says_why_and_holds_nothing(name: str, lab: Laboratory) -> None:
    smiles, code, words = REFUSED_TWINS[name]
    procedures, documents, reservations, movements = lab.counts()
    shown = order_and_plan(lab, target_smiles=smiles)
    assert (shown["state"], shown["reservation"]) == ("refused", None)
    reasons = {reason["code"]: reason["detail"] for reason in shown["reasons"]}
    assert words in reasons[code]
    assert (shown["document"]["verdict"], shown["document"]["route"]) == ("not_plannable", None)
    assert lab.counts() == (procedures + 1, documents + 1, reservations, movements)


GLYCOSIDES = {
    "beta-D-glucoside": "O({})[C@@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O",
    "beta-D-galactoside": "O({})[C@@H]1O[C@H](CO)[C@H](O)[C@H](O)[C@H]1O",
    "alpha-D-mannoside": "O({})[C@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@@H]1O",
    "beta-D-xyloside": "O({})[C@@H]1OC[C@@H](O)[C@H](O)[C@H]1O",
    "alpha-L-rhamnoside": "O({})[C@@H]1O[C@@H](C)[C@H](O)[C@@H](O)[C@H]1O",
    "beta-lactoside": "O({})[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)"
    "[C@H](O)[C@H]1O",
}
# what has to be said, by what the route asks for
SAID = {
    ("DCM-3", "solvent"): "is stabilised with ethanol, an alcohol that takes the donor",
    ("BFE-2", "promoter"): "is quarantined",
    ("MS-2", "drying agent"): "is not activated: it would bring water instead of taking it",
    ("CLO-1", "donor"): "is another sugar (same formula and first InChIKey block)",
    ("LOA-3", "donor"): "is the alpha anomer, 1,2-cis, a sluggish donor",
}


@pytest.mark.parametrize("aglycone", ["CCCCCCCC", ALLYL])
@pytest.mark.parametrize("sugar", GLYCOSIDES)
@pytest.mark.parametrize(
    "promoter", ["boron-trifluoride-diethyl-etherate", "indium-tribromide", "bismuth-triflate"]
)
def test_no_trap_is_chosen_for_a_coupling_and_it_is_said_why(
    promoter: str, sugar: str, aglycone: str, lab: Laboratory
) -> None:
    smiles = GLYCOSIDES[sugar].format(aglycone)
    shown = order_and_plan(lab, target_smiles=smiles, product_mass_g="0.500", promoter=promoter)
    assert shown["state"] == "planned"
    stages = stages_of(shown)
    (coupling,) = (stage for stage in stages if stage["kind"] == "coupling")
    asked = {c["role"] for c in coupling["charges"] if c["group"] == "reaction"}
    assert {"donor", "acceptor", "promoter", "solvent"} <= asked
    for stage in stages:
        flask = {c["bottle"] for c in stage["charges"] if c["group"] == "reaction"}
        assert not flask & TRAPS, stage["kind"]
    passed = {
        (p["bottle"], p["role"]): p["reason"] for p in shown["document"]["route"]["passed_over"]
    }
    expected = {("DCM-3", "solvent")}
    if promoter == "boron-trifluoride-diethyl-etherate":
        expected.add(("BFE-2", "promoter"))
    if "drying agent" in asked:
        expected.add(("MS-2", "drying agent"))
    if sugar == "beta-lactoside":
        expected |= {("CLO-1", "donor"), ("LOA-3", "donor")}
    for key, reason in SAID.items():
        assert passed.get(key) == (reason if key in expected else None), key


def test_all_donors_of_the_shelf_are_used_where_they_hold_enough(lab: Laboratory) -> None:
    """So that the traps above stand beside a bottle that was taken."""
    taken = set()
    for smiles in GLYCOSIDES.values():
        shown = order_and_plan(lab, target_smiles=smiles.format(ALLYL), product_mass_g="0.200")
        (coupling,) = (stage for stage in stages_of(shown) if stage["kind"] == "coupling")
        taken.add(charges_of(coupling)["donor"]["bottle"])
    assert taken == {"GPA-1", "GAL-1", "MAN-1", "XYL-1", "RHA-1", "LOA-1"}


def test_the_traps_are_what_they_are_called(lab: Laboratory) -> None:
    """The shelf still holds every trap; else the tests above would prove nothing."""
    assert set(Bottle.objects.filter(code__in=TRAPS).values_list("code", flat=True)) == TRAPS
    assert lab.bottle("DCM-3").stabiliser_name == "ethanol"
    assert lab.bottle("CHL-1").stabiliser_name == "ethanol"
    assert lab.bottle("BFE-2").status == "quarantined"
