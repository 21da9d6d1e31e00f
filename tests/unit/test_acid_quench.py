"""A free acid with BF3 is quenched into plain water: where the acid fluoride goes."""

import pytest

from labplan.planning.values import Stage, Wishes
from tests.corpus import ACCEPTORS, SUGARS, TRAPS, available, planned
from tests.sheets import BF3

SOLVENTS = ("dichloromethane", "toluene", "acetonitrile")


def coupling(acceptor: str, solvent: str, promoter: str = BF3) -> Stage:
    plan = planned("D-glucose", acceptor, False, Wishes(promoter, solvent), "demo", 1_000.0)
    assert plan.route is not None
    assert plan.route.is_available, plan.route.shortages
    return next(stage for stage in plan.route.stages if stage.kind == "coupling")


def texts(stage: Stage) -> dict[str, str]:
    return {step.title: step.text for step in stage.steps}


@pytest.mark.parametrize("solvent", SOLVENTS)
@pytest.mark.parametrize("acceptor", ["FSO-1", "FTO-1"])
def test_nothing_of_an_acid_quench_is_evaporated_before_it_is_washed(
    acceptor: str, solvent: str
) -> None:
    stage = coupling(acceptor, solvent)
    titles = [step.title for step in stage.steps]
    extract = texts(stage)["Extract"]
    before = " ".join(step.text for step in stage.steps[: titles.index("Extract")])
    assert "vaporate" not in before
    assert "Evaporate nothing before" in extract
    assert "pH 4 or above" in extract
    washes = [c for c in stage.charges if c.key == "acid_wash_water"]
    reaction_ml = next(c.volume_ml for c in stage.charges if c.key == "solvent")
    assert washes[0].volume_ml == pytest.approx(1.5 * (reaction_ml or 0.0), rel=0.02)


def test_acetonitrile_of_an_acid_quench_is_thinned_with_ethyl_acetate() -> None:
    """Three volumes of ethyl acetate, which also extracts; the beaker holds it twice over."""
    stage = coupling("FSO-1", "acetonitrile")
    by_key = {charge.key: charge for charge in stage.charges}
    solvent, dilution = by_key["solvent"], by_key["dilution_solvent"]
    assert dilution.substance == by_key["extraction_solvent"].substance == "ethyl-acetate"
    assert dilution.volume_ml == pytest.approx(3 * (solvent.volume_ml or 0.0), abs=1)
    assert "Thin the filtrate with" in texts(stage)["Quench"]
    assert stage.quench is not None
    liquid = sum(
        by_key[key].volume_ml or 0.0 for key in ("solvent", "quench_water", "dilution_solvent")
    )
    assert stage.quench.vessel_ml >= 2 * liquid
    assert "dilution_solvent" not in {c.key for c in coupling("FSO-1", "toluene").charges}


@pytest.mark.parametrize("solvent", SOLVENTS)
def test_the_syringe_of_an_acid_coupling_goes_into_bicarbonate_of_its_own(solvent: str) -> None:
    """12 mmol of acid from 4 mmol of BF3, and a tenth more: 13.2 x 84.006 = 1.11 g in 16.5 mL."""
    stage = coupling("FSO-1", solvent)
    by_key = {charge.key: charge for charge in stage.charges}
    promoter = by_key["promoter"].amount_mmol or 0.0
    assert promoter < 20
    assert by_key["syringe_base"].mass_mg == 1110.0
    assert by_key["syringe_water"].volume_ml == 16.5
    said = texts(stage)
    assert "never into the quench of plain water" in said["Add the promoter"]
    assert "second, open 50 mL plastic beaker" in said["Make the quench ready"]
    assert "into the open quench" not in said["Add the promoter"]


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_syringe_of_bf3_is_rinsed_with_dry_solvent_and_it_is_charged(sugar: str) -> None:
    seen = 0
    for name, _, stage in available(sugar):
        if stage.kind != "coupling":
            continue
        by_key = {charge.key: charge for charge in stage.charges}
        is_bf3 = by_key["promoter"].substance == BF3
        assert ("syringe_solvent" in by_key) is is_bf3, name
        if not is_bf3:
            continue
        seen += 1
        rinse = by_key["syringe_solvent"]
        assert rinse.bottle is not None
        assert rinse.bottle.code not in TRAPS, name  # dry, and without an alcohol
        assert rinse.substance == by_key["solvent"].substance, name
        assert "in two portions, dropwise into the" in texts(stage)["Add the promoter"], name
    assert seen > 20


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_no_step_may_stand_between_donor_with_alcohol_and_the_promoter(acceptor: str) -> None:
    stage = coupling(acceptor, "dichloromethane")
    titles = [step.title for step in stage.steps]
    first, last = titles.index("Charge donor and alcohol"), titles.index("Add the promoter")
    assert last - first == 2
    assert {step.pause for step in stage.steps[first : last + 1]} == {"do not stop"}
