"""How the form of a bottle's content is printed."""

from decimal import Decimal

BASIS_WORDS = {
    "pct_w_w": "% w/w",
    "pct_w_v": "% w/v",
    "mol_per_l": "mol/L",
    "equiv_per_g": "equiv/g",
    "equiv_per_l": "equiv/L",
}


def form_label(
    kind: str,
    *,
    hydrate_water: Decimal | None = None,
    basis: str = "",
    value: Decimal | None = None,
    solvent_name: str | None = None,
    active_share_pct: Decimal | None = None,
) -> str:
    """One short phrase that tells what is in the bottle beside the substance's name.

    >>> form_label("solution", basis="mol_per_l", value=Decimal("1.0"), solvent_name="Toluene")
    'solution, 1 mol/L in toluene'
    >>> form_label("hydrate", hydrate_water=Decimal("1"))
    'monohydrate'
    """
    if kind == "hydrate":
        return _HYDRATES.get(_plain(hydrate_water), f"hydrate, {_plain(hydrate_water)} water")
    if kind == "solution":
        inside = f" in {solvent_name.lower()}" if solvent_name else ""
        return f"solution, {_plain(value)} {BASIS_WORDS.get(basis, basis)}{inside}"
    if kind == "loaded":
        return f"loaded, {_plain(value)} {BASIS_WORDS.get(basis, basis)}"
    if kind == "anomer_mixture":
        return f"anomer mixture, {_plain(active_share_pct)} % reacts"
    return kind


_HYDRATES = {
    "1": "monohydrate",
    "2": "dihydrate",
    "3": "trihydrate",
    "4": "tetrahydrate",
    "5": "pentahydrate",
    "6": "hexahydrate",
}


def _plain(value: Decimal | None) -> str:
    return f"{value.normalize():f}" if value is not None else "?"
