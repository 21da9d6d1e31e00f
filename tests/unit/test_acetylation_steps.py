"""The peracetylation on paper: where its heat goes, and what its waste gives off."""

import pytest

from labplan.planning.values import Stage, Step, Wishes
from tests.corpus import SUGARS, planned

HOT = ("D-glucose", "D-galactose", "D-xylose", "lactose")


def acetylation(sugar: str) -> Stage:
    plan = planned(sugar, "OCT-1", False, Wishes(), "no peracetates", 2_000.0)
    assert plan.route is not None
    stage = plan.route.stages[0]
    assert stage.kind == "acetylation"
    return stage


def steps(sugar: str) -> dict[str, Step]:
    return {step.title: step for step in acetylation(sugar).steps}


@pytest.mark.parametrize("sugar", SUGARS)
def test_a_portion_without_a_rise_stops_the_addition(sugar: str) -> None:
    watch = steps(sugar)["Add the sugar in portions"].watch
    assert "no rise within 10 min" in watch
    assert "add no more until it has gone" in watch


@pytest.mark.parametrize("sugar", [sugar for sugar in SUGARS if sugar not in HOT])
def test_the_cold_way_is_watched_from_its_start_until_it_stands_still(sugar: str) -> None:
    found = steps(sugar)
    assert found["Add the sugar in portions"].text.startswith("From 5 °C inside")
    warming = found["Let it come to room temperature"]
    assert "watch the thermometer until the inside has not climbed for 1 h" in warming.text
    assert "ice bath ready" in warming.text
    assert warming.pause == "do not stop"
    titles = list(found)
    assert titles.index("Finish the acetylation") == 1 + titles.index(warming.title)
    assert found["Finish the acetylation"].pause.startswith("may stir overnight, under")


@pytest.mark.parametrize("sugar", SUGARS)
def test_the_water_layers_are_neutralised_in_the_open_before_they_are_bottled(sugar: str) -> None:
    step = steps(sugar)["Neutralise the water layers"]
    assert "open, stirred" in step.text
    assert "Bottle it as waste only when the gas has stopped" in step.text
    assert step.charges == ("waste_base",)
    assert "neutralised water layers" in steps(sugar)["Weigh, check and rescale"].text


def test_the_bicarbonate_for_the_waste_of_glucose_is_as_worked_by_hand() -> None:
    """2 x anhydride less 5 acetyls a glucose is the acid; the wash takes its share of it."""
    stage = acetylation("D-glucose")
    by_key = {charge.key: charge for charge in stage.charges}
    acid = 2 * by_key["anhydride"].amount_mmol - 5 * by_key["sugar"].amount_mmol  # type: ignore[operator]
    # the monohydrate: 5 x 1.5 + 1 = 8.5 equiv of anhydride, so 12 of acid a mole of sugar
    assert acid == pytest.approx(12 * stage.scale_mmol, rel=0.02)
    left = acid - by_key["wash_base"].mass_mg / 84.006  # type: ignore[operator]
    assert by_key["waste_base"].mass_mg == pytest.approx(left * 1.1 * 84.006, abs=55)
    gas = acid * 24.465 / 1000
    step = steps("D-glucose")["Neutralise the water layers"]
    assert f"up to {gas:.1f} L of carbon dioxide" in step.text
