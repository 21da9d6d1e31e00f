"""What should come out, and what else may: ions, side products, the anomeric signal."""

import math
import re

from labplan.chemistry.coupling import Target
from labplan.chemistry.masses import ACETYL_CHANGE_DA, monoisotopic_mass_of_formula
from labplan.chemistry.structures import Structure
from labplan.planning.values import Expectations, Ion, SideProduct, Stage


def expect(target: Target, stages: tuple[Stage, ...], halide: str | None) -> Expectations:
    """Ions of every stage, last first; side products; the H-1 signal; the mass of the route."""
    ions = [Ion(i.species, i.ion, i.mz) for stage in reversed(stages) for i in stage.ions]
    coupling = target.residue.coupling_hz if target.residue else None
    return Expectations(
        ions=tuple(dict.fromkeys(ions)),
        side_products=_side_products(target, halide),
        anomeric_coupling_hz=coupling,
        anomeric_signal=_anomeric_signal(target, coupling),
        mass_mg=_mass_range_mg(stages),
    )


def _anomeric_signal(target: Target, coupling: tuple[float, float] | None) -> str:
    """3J(H1,H2) tells the anomer, except where H-2 is equatorial (common practice)."""
    if coupling is None:
        return "no figure for this sugar"
    low, high = coupling
    text = f"H-1 of the product: d, 3J(H1,H2) {low:g} to {high:g} Hz"
    if high <= 2:
        return (
            f"{text} for both anomers, so it does not decide; 1J(C1,H1) does: 167 to 175 Hz alpha, "
            "155 to 163 Hz beta"
        )
    return f"{text}; 3 to 4 Hz means the 1,2-cis glycoside"


def _mass_range_mg(stages: tuple[Stage, ...]) -> tuple[float, float, float] | None:
    """The product of the last stage [mg], its range from the yields' ranges in quadrature."""
    if not stages:
        return None
    planned = stages[-1].expected_mass_mg
    if len(stages) == 1:
        return stages[0].expected_low_mg, planned, stages[0].expected_high_mg
    spread = math.sqrt(
        sum(((high - low) / 2 / middle) ** 2 for low, middle, high in (s.yield_pct for s in stages))
    )
    return planned * (1 - spread), planned, planned * (1 + spread)


def _side_products(target: Target, halide: str | None) -> tuple[SideProduct, ...]:
    """After the usual list for Lewis-acid couplings of peracetates (common practice)."""
    product, donor, acceptor = target.glycoside, target.donor, target.acceptor
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
            f"{isomer}; {_tells_the_anomer(target)}",
        ),
        SideProduct(
            "hemiacetal (water got in)", _shift(donor.formula, C=-2, H=-2, O=-1), hemiacetal,
            "runs below the donor",
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
            acceptor.monoisotopic_mass_da + acetyl, _tells_the_acetate(target),
        ),
        *_glycosyl_halide(donor, halide),
    )  # fmt: skip


def _tells_the_acetate(target: Target) -> str:
    """A protected amino acid ionises, absorbs, and is too polar to run at the front."""
    is_amino_acid = bool({"Fmoc", "Cbz"} & set(target.acceptor_groups))
    if target.acceptor_acids:
        at_254 = " and at 254 nm" if is_amino_acid else ""
        return f"seen by ESI{at_254}; an acid: streaks, near the acceptor"
    if is_amino_acid:
        return "seen by ESI ([M+Na]+) and at 254 nm; runs between the acceptor and the front"
    return "often unseen by ESI; runs at the front"


def _glycosyl_halide(donor: Structure, halide: str | None) -> tuple[SideProduct, ...]:
    """The donor with the promoter's halide in place of its 1-O-acetyl."""
    if halide is None:
        return ()
    name, sign = {
        "F": ("glycosyl fluoride", "2J(H1,F) near 50 Hz"),
        "Br": ("glycosyl bromide", "two masses 2 Da apart, as of one bromine"),
    }[halide]
    lost = monoisotopic_mass_of_formula("C2H3O2")
    mass = donor.monoisotopic_mass_da - lost + monoisotopic_mass_of_formula(halide)
    formula = _shift(donor.formula, C=-2, H=-3, O=-2, **{halide: 1})
    return (SideProduct(name, formula, mass, sign),)


def _tells_the_anomer(target: Target) -> str:
    hz = target.residue.coupling_hz if target.residue else None
    return "1J(C1,H1) decides" if hz and hz[1] <= 2 else "small 3J(H1,H2)"


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
