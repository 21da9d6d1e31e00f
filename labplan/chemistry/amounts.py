"""How much substance a bottle's content is: assay, hydrate, solution, density. One place only."""

from dataclasses import dataclass

from labplan.chemistry.masses import WATER_MOLAR_MASS_G_PER_MOL, molar_mass_of_formula

# Only these are fractions by mass and divide a mass; an area per cent grades a bottle.
MASS_FRACTION_ASSAYS = frozenset({"titration", "qnmr", "against_standard"})


@dataclass(frozen=True)
class Content:
    """What a bottle's label and form say about the share of the substance in what is weighed.

    `assay_of` is "as_is", "anhydrous", "hydrate" or a formula (46.5 % "BF3" in the etherate).
    """

    molar_mass_g_per_mol: float
    form: str = "neat"
    hydrate_water: float = 0.0
    solution_basis: str = ""
    solution_value: float = 0.0
    active_share_pct: float | None = None
    assay_pct: float | None = None
    assay_of: str = "as_is"
    assay_kind: str = "unspecified"
    density_g_per_ml: float | None = None


def mass_fraction(content: Content) -> float:
    """Share of the substance in what is weighed [g/g], in (0, 1].

    Source: CHEMISTRY rules kept in docs/chemistry.md, section Amounts (common practice).
    Raises ValueError where a solution by volume has no density.

    >>> round(mass_fraction(Content(141.928, assay_pct=46.5, assay_of="BF3",
    ...                             assay_kind="titration")), 4)
    0.9733
    """
    if content.form == "solution":
        return _solution_mass_fraction(content)
    share = _assay_fraction(content)
    if content.form == "hydrate" and content.assay_of != "anhydrous":
        # The assay is of the hydrate as weighed: count its water once, here.
        hydrate = weighed_molar_mass(content)
        share *= content.molar_mass_g_per_mol / hydrate
    if content.form == "hydrate" and content.assay_of == "anhydrous":
        water = content.hydrate_water * WATER_MOLAR_MASS_G_PER_MOL
        share *= 1 - water / weighed_molar_mass(content)
    if content.active_share_pct is not None:
        share *= content.active_share_pct / 100
    return share


def weighed_molar_mass(content: Content) -> float:
    """Molar mass [g/mol] of what is weighed: the hydrate's where it is one."""
    return content.molar_mass_g_per_mol + content.hydrate_water * WATER_MOLAR_MASS_G_PER_MOL


def _assay_fraction(content: Content) -> float:
    if content.assay_pct is None or content.assay_kind not in MASS_FRACTION_ASSAYS:
        return 1.0
    share = content.assay_pct / 100
    if content.assay_of not in ("as_is", "anhydrous", "hydrate"):
        # The label gives a part of the compound, one a molecule: scale it up to the whole.
        share *= content.molar_mass_g_per_mol / molar_mass_of_formula(content.assay_of)
    return min(share, 1.0)


def _solution_mass_fraction(content: Content) -> float:
    if content.solution_basis == "pct_w_w":
        return content.solution_value / 100
    if content.density_g_per_ml is None:
        raise ValueError("a solution by volume needs the density of the solution")
    grams_per_ml = {
        "pct_w_v": content.solution_value / 100,
        "mol_per_l": content.solution_value * content.molar_mass_g_per_mol / 1000,
    }[content.solution_basis]
    return grams_per_ml / content.density_g_per_ml


def mass_mg(amount_mmol: float, content: Content) -> float:
    """Mass to weigh [mg] for an amount of substance [mmol].

    >>> lactose_hydrate = Content(342.297, form="hydrate", hydrate_water=1, assay_pct=99.0,
    ...                           assay_of="hydrate", assay_kind="titration")
    >>> round(mass_mg(10.0, lactose_hydrate), 1)
    3639.5
    """
    return amount_mmol * content.molar_mass_g_per_mol / mass_fraction(content)


def amount_mmol(mass_mg: float, content: Content) -> float:
    """Amount of substance [mmol] in a weighed mass [mg]."""
    return mass_mg * mass_fraction(content) / content.molar_mass_g_per_mol


def volume_ml(mass_mg: float, density_g_per_ml: float) -> float:
    """Volume [mL] of a mass [mg] at the density's temperature [g/mL]."""
    return mass_mg / 1000 / density_g_per_ml


def mass_mg_of_volume(volume_ml: float, density_g_per_ml: float) -> float:
    """Mass [mg] of a volume [mL] at the density's temperature [g/mL]."""
    return volume_ml * 1000 * density_g_per_ml
