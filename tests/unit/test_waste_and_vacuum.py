"""Where everything goes that a coupling leaves, at which pressure, and what the crude weighs."""

import re
from itertools import product

import pytest

from labplan.planning import evaporation
from labplan.planning.values import Stage, Wishes
from tests.corpus import ACCEPTORS, ACIDS, PROMOTERS, SOLVENTS, SUGARS, available, planned
from tests.sheets import BF3

BOILING_C = {
    "dichloromethane": 39.8, "ethyl-acetate": 77.1, "n-heptane": 98.4, "methanol": 64.6,
    "toluene": 110.6, "acetonitrile": 81.6,
}  # fmt: skip
NAMES = {key.removeprefix("n-").replace("-", " "): key for key in BOILING_C}
WASHED_OUT = {
    "BRE-1": "2-bromoethanol", "ALL-1": "allyl alcohol", "PRO-1": "propargyl alcohol",
    "PEN-1": "4-penten-1-ol",
}  # fmt: skip


def coupling(
    acceptor: str, promoter: str = BF3, solvent: str | None = None, sugar: str = "D-glucose",
    shelf: str = "demo",
) -> Stage:  # fmt: skip
    plan = planned(sugar, acceptor, False, Wishes(promoter, solvent), shelf, 1_000.0)
    assert plan.route is not None
    assert plan.route.is_available, plan.route.shortages
    return next(stage for stage in plan.route.stages if stage.kind == "coupling")


def waste(stage: Stage) -> str:
    return next(step.text for step in stage.steps if step.title == "Sort the waste")


# The triflate alkylates toluene: there is no such method.
PAIRS = [
    pair for pair in product(PROMOTERS[1:], SOLVENTS) if pair != ("bismuth-triflate", "toluene")
]


@pytest.mark.parametrize(("promoter", "solvent"), PAIRS)
def test_every_solvent_and_solid_of_a_coupling_has_its_waste(promoter: str, solvent: str) -> None:
    text = waste(coupling("OCT-1", promoter, solvent))
    assert solvent in text.lower()
    for part in ("dichloromethane", "heptane", "ethyl acetate", "filter cake", "drying agent"):
        assert part in text.lower(), part
    carried = {BF3: "fluoride", "indium-tribromide": "indium", "bismuth-triflate": "bismuth"}
    assert f"they carry {carried[promoter]}" in text
    assert "silica to solid waste" in text.lower()


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_an_alcohol_that_washes_out_is_named_on_the_label_of_the_water(acceptor: str) -> None:
    text = waste(coupling(acceptor))
    name = WASHED_OUT.get(acceptor)
    assert ("write it on both labels" in text) is (name is not None)
    assert name is None or f"hold the {name} that is left" in text


@pytest.mark.parametrize("promoter", PROMOTERS[1:])
def test_all_that_holds_azide_is_azide_waste_and_nothing_else(promoter: str) -> None:
    stage = coupling("AZE-1", promoter)
    text = waste(stage)
    assert text.startswith("Azide waste, in a container of its own")
    azide, _, rest = text.partition("never to acid, copper or lead")
    for part in ("the water layers", "condenser and pump trap"):
        assert part in azide
        assert part not in rest
    assert "never into the halogenated" in text
    assert "to aqueous" not in text
    everything = " ".join(step.text for step in stage.steps)
    assert "to halogenated" not in everything


@pytest.mark.parametrize("substance", BOILING_C)
def test_the_constants_give_the_boiling_points(substance: str) -> None:
    at_boiling = evaporation.vapour_pressure_mbar(substance, BOILING_C[substance])
    assert at_boiling == pytest.approx(1013, rel=0.02)


PRINTED = re.compile(r"(\b[a-z]+(?: acetate)?) (?:at \d+ °C or below \()?from (\d+) mbar on")


def boiled(stage: Stage) -> set[tuple[str, str]]:
    """Solvents with their baths: each would boil in a bath that is 10 K cooler."""
    seen = set()
    for step in stage.steps:
        pressures = PRINTED.findall(step.text)
        assert pressures or "mbar" not in step.text, step.text
        for solvent, mbar in pressures:
            (bath,) = set(re.findall(r"(\d+) °C or below", step.text))
            key = NAMES[solvent]
            limit = evaporation.vapour_pressure_mbar(key, float(bath) - 10)
            assert float(mbar) < limit, (step.text, solvent)
            seen.add((key, bath))
    return seen


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_pressure_printed_boils_its_solvent_in_the_bath_named(sugar: str) -> None:
    seen = set().union(*(boiled(stage) for _, _, stage in available(sugar)))
    assert seen >= {(solvent, "40") for solvent in BOILING_C}


def test_the_cool_bath_of_an_azide_takes_lower_pressures() -> None:
    assert boiled(coupling("AZE-1")) == {
        (solvent, "30") for solvent in ("dichloromethane", "toluene", "ethyl-acetate", "n-heptane")
    }


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_the_crude_is_at_most_what_can_be_left(acceptor: str) -> None:
    """The alcohol counts only where it stays: not up to four carbons, not under 150 °C."""
    stage = coupling(acceptor)
    by_key = {charge.key: charge for charge in stage.charges}
    product_mg = stage.scale_mmol * stage.product.molar_mass_g_per_mol
    stays = acceptor not in {*WASHED_OUT, "AZE-1"}
    assert ("alcohol that is left over" in stage.gross_means) is stays
    over_mmol = (by_key["acceptor"].amount_mmol or 0.0) - stage.scale_mmol
    assert over_mmol > 0
    if stays:
        assert stage.gross_mass_mg > product_mg + over_mmol * 100
    else:
        assert stage.gross_mass_mg == pytest.approx(product_mg)
    text = next(step.text for step in stage.steps if step.title == "Dry and concentrate")
    assert "Weigh the crude: at most" in text
    said = " ".join(step.text for step in stage.steps)
    assert ("has gone with the water layers" in said or "rest at the oil pump" in said) is not stays
    assert acceptor not in ACIDS or stays


def test_the_donor_that_does_not_react_is_in_the_crude_and_in_the_silica() -> None:
    """15 % of the mannose peracetate made is not the 1,2-trans form: 15/85 mol a mole that is."""
    stage = coupling("PEN-1", sugar="D-mannose", shelf="no peracetates")
    product_mg = stage.scale_mmol * stage.product.molar_mass_g_per_mol
    other_mg = stage.scale_mmol * 15 / 85 * 390.341
    assert stage.gross_mass_mg == pytest.approx(product_mg + other_mg, rel=1e-5)
    assert stage.gross_means == "product in full and the donor in its forms that do not react"
    silica = next(charge for charge in stage.charges if charge.key == "silica")
    assert silica.mass_mg == pytest.approx(40 * (product_mg + other_mg), rel=0.01)


@pytest.mark.parametrize("sugar", SUGARS)
def test_figures_and_mixtures_are_said_as_a_chemist_reads_them(sugar: str) -> None:
    for name, _, stage in available(sugar):
        said = {step.title: step.text for step in stage.steps}
        everything = " ".join(said.values())
        assert "a share each" not in everything, name
        if "Purify" in said:
            assert re.search(r"column of about \d+(\.5)? cm inner diameter", said["Purify"]), name
            assert re.search(r"mixed as heptane/ethyl acetate \d:\d,", said["Purify"]), name
            is_cold = "Cool to 0 °C (inside)" in said["Add the promoter"]
            assert ("back to 0 °C" in said["Quench"]) is is_cold, name
        if "Neutralise" in said:
            assert "otherwise" not in said["Neutralise"], name
        if "Dry the peracetate" in said:
            by_key = {charge.key: charge for charge in stage.charges}
            third = int((by_key["drying_solvent"].volume_ml or 0.0) / 3)
            assert f"3 × {third} mL" in said["Dry the peracetate"], name
        for litres in re.findall(r"[Uu]p to ([\d.]+) L of carbon dioxide", everything):
            assert len(litres.replace(".", "").lstrip("0")) <= 2, name
