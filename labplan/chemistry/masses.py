"""Molar masses from formulas, and the ions to look for."""

import re

from rdkit import Chem

# CODATA 2018 electron mass in u (physics.nist.gov/cuu/Constants).
ELECTRON_MASS_U = 0.000548579909
_TOKEN = re.compile(r"([A-Z][a-z]?)(\d*)")
_TABLE = Chem.GetPeriodicTable()
WATER_MOLAR_MASS_G_PER_MOL = 18.015
ACETYL_CHANGE_DA = 42.010565  # C2H2O, monoisotopic


def molar_mass_of_formula(formula: str) -> float:
    """Average molar mass [g/mol] of a plain formula such as BF3 or C8H18O.

    Raises ValueError for brackets, charges and unknown elements.

    >>> round(molar_mass_of_formula("BF3"), 2)
    67.81
    """
    return _sum_over(formula, _TABLE.GetAtomicWeight)


def monoisotopic_mass_of_formula(formula: str) -> float:
    """Mass [Da] of the most common isotopes of a plain formula."""
    return _sum_over(formula, _TABLE.GetMostCommonIsotopeMass)


def atoms_of_formula(formula: str) -> dict[str, int]:
    """How many atoms of each element a plain formula counts.

    >>> atoms_of_formula("C2H6O")
    {'C': 2, 'H': 6, 'O': 1}
    """
    counts: dict[str, int] = {}
    for symbol, count in _TOKEN.findall(formula):
        counts[symbol] = counts.get(symbol, 0) + int(count or 1)
    return counts


def is_part_of_formula(part: str, whole: str) -> bool:
    """Whether a compound of formula `whole` could contain `part` once."""
    atoms = atoms_of_formula(whole)
    return all(atoms.get(symbol, 0) >= n for symbol, n in atoms_of_formula(part).items())


def _sum_over(formula: str, mass_of) -> float:  # type: ignore[no-untyped-def]
    tokens = _TOKEN.findall(formula)
    if not formula or "".join(symbol + count for symbol, count in tokens) != formula:
        raise ValueError(f"not a plain formula: {formula!r}")
    total = 0.0
    for symbol, count in tokens:
        try:
            mass = mass_of(symbol)
        except RuntimeError as error:
            raise ValueError(f"unknown element {symbol!r} in {formula!r}") from error
        total += float(mass) * int(count or 1)
    return total


def adduct_mz(monoisotopic_mass_da: float, adduct: str) -> float:
    """m/z of a singly charged ion [Da]: "H", "NH4", "Na" or "K" added, an electron lost.

    >>> round(adduct_mz(704.252815, "Na"), 4)
    727.242
    """
    added = {"H": "H", "NH4": "NH4", "Na": "Na", "K": "K"}[adduct]
    return monoisotopic_mass_da + monoisotopic_mass_of_formula(added) - ELECTRON_MASS_U


def oxocarbenium_mz(donor_monoisotopic_mass_da: float) -> float:
    """m/z of the glycosyl cation left when a peracetate loses acetate (C2H3O2-)."""
    acetate = monoisotopic_mass_of_formula("C2H3O2")
    return donor_monoisotopic_mass_da - acetate - ELECTRON_MASS_U
