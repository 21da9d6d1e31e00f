"""What should come out, and what else may: ions, side products, the anomeric signal."""

import re

from labplan.chemistry.coupling import Target
from labplan.chemistry.masses import (
    ACETYL_CHANGE_DA,
    adduct_mz,
    monoisotopic_mass_of_formula,
    oxocarbenium_mz,
)
from labplan.planning.values import Expectations, Ion, SideProduct

# 3J(H1,H2) [Hz] of 1,2-trans pyranosides by configuration (common practice).
COUPLING_HZ = {"glucose": (7.0, 8.5), "galactose": (7.0, 8.5)}


def expect(target: Target) -> Expectations:
    """Ions of product and donor, side products with what tells them apart, the H-1 signal."""
    product, donor = target.structure, target.donor
    hemiacetal_da = donor.monoisotopic_mass_da - ACETYL_CHANGE_DA
    ions = [
        Ion("product", f"[M+{adduct}]+", adduct_mz(product.monoisotopic_mass_da, adduct))
        for adduct in ("NH4", "Na")
    ]
    ions += [
        Ion("donor", "[M+NH4]+", adduct_mz(donor.monoisotopic_mass_da, "NH4")),
        Ion("donor", "[M+Na]+", adduct_mz(donor.monoisotopic_mass_da, "Na")),
        Ion("glycosyl cation", "[M-OAc]+", oxocarbenium_mz(donor.monoisotopic_mass_da)),
        Ion("hemiacetal (donor + water)", "[M+Na]+", adduct_mz(hemiacetal_da, "Na")),
    ]
    sugar = (target.residue_name or "").split("-")[-1]
    coupling = COUPLING_HZ.get(sugar)
    signal = (
        f"H-1 of the product: d, 3J(H1,H2) {coupling[0]:g} to {coupling[1]:g} Hz in CDCl3; "
        "3 to 4 Hz means the 1,2-cis glycoside"
        if coupling
        else "no figure for this sugar"
    )
    return Expectations(tuple(ions), _side_products(target), coupling, signal)


def _side_products(target: Target) -> tuple[SideProduct, ...]:
    """After the usual list for Lewis-acid couplings of peracetates (common practice)."""
    product, donor, acceptor = target.structure, target.donor, target.acceptor
    acetyl = ACETYL_CHANGE_DA
    water = monoisotopic_mass_of_formula("H2O")
    hemiacetal = donor.monoisotopic_mass_da - acetyl
    isomer = "same mass as the product"
    return (
        SideProduct(
            "1,2-orthoester", product.formula, product.monoisotopic_mass_da,
            f"{isomer}; its methyl signal near 1.7 ppm, and it goes on to product with a little "
            "more promoter",
        ),
        SideProduct(
            "1,2-cis glycoside", product.formula, product.monoisotopic_mass_da,
            f"{isomer}; small 3J(H1,H2)",
        ),
        SideProduct(
            "hemiacetal (water got in)", _shift(donor.formula, C=-2, H=-2, O=-1), hemiacetal,
            "runs below the donor; H-1 of the alpha form near 5.4 ppm",
        ),
        SideProduct(
            "1,1-linked dimer (water got in)", _double(donor.formula), 2 * hemiacetal - water,
            "high mass; runs near the product",
        ),
        SideProduct(
            "product less one acetyl", _shift(product.formula, C=-2, H=-2, O=-1),
            product.monoisotopic_mass_da - acetyl, "runs below the product; re-acetylate",
        ),
        SideProduct(
            "acetate of the acceptor", _shift(acceptor.formula, C=2, H=2, O=1),
            acceptor.monoisotopic_mass_da + acetyl, "often unseen by ESI; runs at the front",
        ),
        SideProduct(
            "glycosyl fluoride", _shift(donor.formula, C=-2, H=-3, O=-2, F=1),
            donor.monoisotopic_mass_da
            - monoisotopic_mass_of_formula("C2H3O2") + monoisotopic_mass_of_formula("F"),
            "2J(H1,F) near 50 Hz",
        ),
    )  # fmt: skip


def _counts(formula: str) -> dict[str, int]:
    found = re.findall(r"([A-Z][a-z]?)(\d*)", formula)
    return {symbol: int(count or 1) for symbol, count in found}


def _hill(counts: dict[str, int]) -> str:
    """Hill order: C, H, then the alphabet."""
    order = sorted(counts, key=lambda s: (s != "C", s != "H", s))
    return "".join(f"{s}{counts[s] if counts[s] > 1 else ''}" for s in order if counts[s])


def _shift(formula: str, **changes: int) -> str:
    counts = _counts(formula)
    for symbol, change in changes.items():
        counts[symbol] = counts.get(symbol, 0) + change
    return _hill(counts)


def _double(donor_formula: str) -> str:
    """Two hemiacetals less one water."""
    hemiacetal = _counts(_shift(donor_formula, C=-2, H=-2, O=-1))
    doubled = {symbol: 2 * count for symbol, count in hemiacetal.items()}
    doubled["H"] -= 2
    doubled["O"] -= 1
    return _hill(doubled)
