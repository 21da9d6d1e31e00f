"""Assay, hydrate, solution, density: figures worked by hand."""

import pytest

from labplan.chemistry.amounts import Content, amount_mmol, mass_fraction, mass_mg, volume_ml
from labplan.chemistry.masses import (
    adduct_mz,
    molar_mass_of_formula,
    monoisotopic_mass_of_formula,
    oxocarbenium_mz,
)

ETHERATE = Content(
    141.928, assay_pct=46.5, assay_of="BF3", assay_kind="titration", density_g_per_ml=1.125
)


def test_an_assay_as_bf3_is_scaled_up_to_the_etherate() -> None:
    # 67.805 / 141.928 = 47.774 %, so 46.5 % as BF3 is 97.33 % etherate (computed by hand)
    assert mass_fraction(ETHERATE) == pytest.approx(0.97333, abs=3e-5)
    # 27.0738 mmol x 141.928 / 0.97333 = 3947.8 mg = 3.5092 mL at 1.125 g/mL
    assert mass_mg(27.0738, ETHERATE) == pytest.approx(3947.8, abs=0.2)
    assert volume_ml(mass_mg(27.0738, ETHERATE), 1.125) == pytest.approx(3.5092, abs=2e-4)


def test_taken_as_etherate_the_same_label_would_dose_twice_as_much() -> None:
    wrong = Content(141.928, assay_pct=46.5, assay_kind="titration")
    assert 3.0 * mass_mg(1.0, wrong) / mass_mg(1.0, ETHERATE) == pytest.approx(6.28, abs=0.005)


@pytest.mark.parametrize("assay_of", ["hydrate", "as_is"])
def test_lactose_monohydrate_counts_its_water_once(assay_of: str) -> None:
    lactose = Content(
        342.297, form="hydrate", hydrate_water=1, assay_pct=99.0, assay_of=assay_of,
        assay_kind="against_standard",
    )  # fmt: skip
    # 10.000 mmol x 360.312 / 0.99 = 3639.5 mg; neither 3830 nor 3458
    assert mass_mg(10.0, lactose) == pytest.approx(3639.5, abs=0.05)


def test_an_assay_on_anhydrous_basis_divides_by_the_dry_share_too() -> None:
    lactose = Content(
        342.297, form="hydrate", hydrate_water=1, assay_pct=99.0, assay_of="anhydrous",
        assay_kind="against_standard",
    )  # fmt: skip
    # m = n M / (a (1 - w)), w = 18.015 / 360.312 = 0.049998
    assert mass_mg(10.0, lactose) == pytest.approx(3422.97 / (0.99 * 0.950002), abs=0.02)


def test_an_area_per_cent_does_not_divide() -> None:
    octanol = Content(130.231, assay_pct=99.0, assay_kind="area_pct")
    assert mass_fraction(octanol) == 1.0


def test_only_the_active_share_of_a_mix_of_anomers_counts() -> None:
    mix = Content(
        390.341, form="anomer_mixture", active_share_pct=78, assay_pct=97, assay_kind="qnmr"
    )
    assert mass_fraction(mix) == pytest.approx(0.97 * 0.78)


def test_solutions_by_mass_and_by_volume() -> None:
    methoxide = Content(54.024, form="solution", solution_basis="pct_w_w", solution_value=25.0)
    # 3.790 mmol x 54.024 / 0.25 = 819.0 mg; / 0.945 = 0.867 mL
    assert volume_ml(mass_mg(3.790, methoxide), 0.945) == pytest.approx(0.8667, abs=2e-4)
    molar = Content(
        87.08, form="solution", solution_basis="mol_per_l", solution_value=1.0,
        density_g_per_ml=0.88,
    )  # fmt: skip
    assert volume_ml(mass_mg(2.5, molar), 0.88) == pytest.approx(2.5)


def test_a_molar_solution_without_density_is_refused() -> None:
    with pytest.raises(ValueError, match="density"):
        mass_fraction(Content(87.08, form="solution", solution_basis="mol_per_l", solution_value=1))


def test_mass_and_amount_are_inverse() -> None:
    assert amount_mmol(mass_mg(1.234, ETHERATE), ETHERATE) == pytest.approx(1.234)


def test_formula_masses_agree_with_the_published_atomic_weights() -> None:
    # C 12.011, H 1.008, O 15.999, F 18.998 and B 10.81 (IUPAC abridged standard atomic weights)
    assert molar_mass_of_formula("BF3") == pytest.approx(10.81 + 3 * 18.998, abs=0.005)
    assert molar_mass_of_formula("C31H44O18") == pytest.approx(704.675, abs=0.003)
    for wrong in ("", "BF3.", "Xx2", "bf3", "B(F)3"):
        with pytest.raises(ValueError, match=r"formula|element"):
            molar_mass_of_formula(wrong)


def test_ions_count_the_electron() -> None:
    # NIST: Na 22.9897692820, electron 0.000548579909 u; 704.252815 + 22.989221 = 727.242036
    assert adduct_mz(704.252815, "Na") == pytest.approx(727.2420, abs=5e-5)
    assert adduct_mz(704.252815, "NH4") == pytest.approx(722.2866, abs=5e-5)
    # tetra-O-acetylhexosyl cation C14H19O9+: 331.1029 less an electron
    assert oxocarbenium_mz(390.116212) == pytest.approx(331.1024, abs=5e-5)
    assert monoisotopic_mass_of_formula("C14H19O9") == pytest.approx(331.10291, abs=5e-5)
