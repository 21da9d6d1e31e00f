"""Warnings and refusals name the danger, the bottle and the way out."""

import re

import pytest

from labplan.chemistry.coupling import read_target
from labplan.chemistry.errors import TargetProblem
from labplan.planning.bottles import check_no_crystal_water
from labplan.planning.plan import make_plan
from labplan.planning.values import Scale, Stage, Wishes
from tests.corpus import ACCEPTORS, ACIDS, ESTERS, PROMOTERS, planned, target_of
from tests.sheets import BF3
from tests.shelf import AS_OF, demo_shelf

OCTYL_GALACTOSIDE = "CCCCCCCCO[C@@H]1O[C@H](CO)[C@H](O)[C@H](O)[C@H]1O"
TOXIC = {
    "BRE-1": "2-Bromoethanol is fatal if swallowed, in contact with skin or if inhaled "
    "(H300, H310, H330)",
    "ALL-1": "Allyl alcohol is toxic if swallowed, in contact with skin or if inhaled "
    "(H301, H311, H331)",
    "PRO-1": "Propargyl alcohol is toxic if swallowed, in contact with skin or if inhaled "
    "(H301, H311, H331)",
}


def stages(
    acceptor: str, promoter: str = BF3, solvent: str | None = None, shelf: str = "demo",
    sugar: str = "D-glucose",
) -> tuple[Stage, ...]:  # fmt: skip
    plan = planned(sugar, acceptor, False, Wishes(promoter, solvent), shelf, 1_000.0)
    assert plan.route is not None
    assert plan.route.is_available, plan.route.shortages
    return plan.route.stages


def text_of(stage: Stage, title: str) -> str:
    return next(step.text for step in stage.steps if step.title == title)


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_the_step_that_opens_a_toxic_alcohol_says_so(acceptor: str) -> None:
    text = text_of(stages(acceptor)[0], "Charge donor and alcohol")
    said = TOXIC.get(acceptor)
    assert (said is None) or said in text
    assert bool(re.search(r" is (?:fatal|toxic) ", text)) is (said is not None)


def test_the_step_that_opens_bf3_says_that_it_is_fatal_and_the_doctor_comes_at_once() -> None:
    (stage,) = stages("OCT-1")
    promoter = text_of(stage, "Add the promoter")
    assert "Boron trifluoride diethyl etherate is fatal if inhaled (H330)" in promoter
    before = text_of(stage, "Before you start")
    assert "Breathed in: fresh air and a doctor at once, even if well" in before


@pytest.mark.parametrize("sugar", ["D-glucose", "D-mannose"])
def test_acetic_anhydride_is_toxic_and_not_harmful(sugar: str) -> None:
    first = stages("OCT-1", shelf="no peracetates", sugar=sugar)[0]
    text = text_of(first, "Before you start")
    assert "Acetic anhydride is toxic if inhaled (H331)" in text
    assert "a doctor at once, even if well" in text
    assert "harmful" not in text


def test_the_water_of_a_triflate_hydrate_is_said_against_the_promoter() -> None:
    """1 g at 45 %: 4.8255 mmol x 0.1 x 4 of hydrate water, four times the promoter, and more."""
    plan = planned(
        "D-glucose", "OCT-1", False, Wishes("bismuth-triflate", "acetonitrile"), "demo", 1_000.0
    )
    (stage,) = plan.route.stages  # type: ignore[union-attr]
    promoter = next(charge for charge in stage.charges if charge.key == "promoter")
    assert stage.water is not None
    assert promoter.amount_mmol is not None
    share = 100 * stage.water.total_mmol / promoter.amount_mmol
    assert stage.water.promoter_share_pct == pytest.approx(share)
    assert 400 < share < 420
    said = {warning.code: warning.detail for warning in plan.route.warnings}  # type: ignore[union-attr]
    assert f"is {share:.0f} % of the promoter by amount" in said["water_takes_promoter"]
    # 656.19 g/mol without its water
    dry_mg = promoter.amount_mmol * 656.19
    dried = f"weigh {dry_mg:.0f} mg of it in place of {promoter.mass_mg:.0f} mg"
    assert dried in said["water_takes_promoter"]
    assert dried in said["water_takes_donor"]
    left = 45 * (1 - stage.water.donor_share_pct / 100)
    assert f"as charged it may be {left:.0f} % instead of 45 %" in said["water_takes_donor"]


@pytest.mark.parametrize("promoter", PROMOTERS[1:])
def test_what_goes_in_at_once_is_not_to_be_slowed(promoter: str) -> None:
    (stage,) = stages("OCT-1", promoter)
    step = next(step for step in stage.steps if step.title == "Add the promoter")
    assert ("slow the addition" in step.watch) is ("dropwise over" in step.text)
    assert ("in one portion" in step.text) is (promoter != BF3)


def test_sodium_acetate_is_charged_and_named_anhydrous() -> None:
    first = stages("OCT-1", shelf="no peracetates")[0]
    reagent = next(charge for charge in first.charges if charge.key == "reagent")
    assert reagent.name == "Sodium acetate, anhydrous"
    assert "of sodium acetate, anhydrous (bottle NAC-1)" in text_of(
        first, "Heat anhydride and salt"
    )


def test_a_hydrate_of_sodium_acetate_is_passed_over() -> None:
    (hydrate,) = (bottle for bottle in demo_shelf() if bottle.code == "LAC-1")
    (anhydrous,) = (bottle for bottle in demo_shelf() if bottle.code == "NAC-1")
    assert check_no_crystal_water(anhydrous, AS_OF) is None
    assert "water of crystallisation" in (check_no_crystal_water(hydrate, AS_OF) or "")


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_the_acetate_of_an_amino_acid_does_not_run_at_the_front_unseen(acceptor: str) -> None:
    plan = planned("D-glucose", acceptor, False, Wishes(BF3), "demo", 1_000.0)
    assert plan.expectations is not None
    (said,) = (
        side.told_apart_by
        for side in plan.expectations.side_products
        if side.name == "acetate of the acceptor"
    )
    is_amino_acid = acceptor in {**ACIDS, **ESTERS}
    assert ("seen by ESI" in said and "254 nm" in said) is is_amino_acid
    assert (said == "often unseen by ESI; runs at the front") is not is_amino_acid


@pytest.mark.parametrize(
    "smiles",
    [
        "CCS[C@@H]1O[C@H](COC(C)=O)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O",
        "Cc1ccc(S[C@@H]2O[C@H](CO)[C@@H](O)[C@H](O)[C@H]2NC(C)=O)cc1",
    ],
)
def test_a_thioglycoside_is_said_to_be_one(smiles: str) -> None:
    with pytest.raises(TargetProblem) as caught:
        read_target(smiles)
    assert caught.value.code == "s_glycoside"
    assert "S-glycoside" in caught.value.detail


@pytest.mark.parametrize("milligrams", [2.0, 10.0, 20.0, 50.0])
def test_a_refused_scale_names_the_least_and_that_one_is_planned(milligrams: float) -> None:
    target = read_target(OCTYL_GALACTOSIDE)
    plan = make_plan(target, Scale(product_mass_mg=milligrams), demo_shelf(), as_of=AS_OF)
    (reason,) = plan.reasons
    assert reason.code == "below_least_weighable"
    assert "the solution of sodium methoxide; thin it with its own dry solvent" in reason.detail
    least = re.search(r"Ask for about (\d+) mg of product or more", reason.detail)
    assert least is not None
    asked = Scale(product_mass_mg=float(least.group(1)))
    assert make_plan(target, asked, demo_shelf(), as_of=AS_OF).verdict == "plannable"


def test_a_scale_by_the_acceptor_is_refused_in_its_own_unit() -> None:
    target = target_of("D-galactose", "OCT-1", free=False)
    plan = make_plan(target, Scale(acceptor_amount_mmol=0.01), demo_shelf(), as_of=AS_OF)
    (reason,) = plan.reasons
    assert "Too little to weigh well (under 20 mg)" in reason.detail
    least = re.search(r"Ask for about ([\d.]+) mmol of acceptor or more", reason.detail)
    assert least is not None
    asked = Scale(acceptor_amount_mmol=float(least.group(1)))
    assert make_plan(target, asked, demo_shelf(), as_of=AS_OF).verdict == "plannable"
