"""From a bottle's row to what planning and the book reckon with."""

from inventory.models import Bottle
from labplan.chemistry.amounts import Content


def content_of(bottle: Bottle) -> Content | None:
    """The assay, form and density of a bottle as plain numbers; None without a molar mass."""
    form, substance = bottle.form, bottle.form.substance
    if substance.molar_mass_g_per_mol is None:
        return None
    return Content(
        molar_mass_g_per_mol=float(substance.molar_mass_g_per_mol),
        form=form.kind,
        hydrate_water=float(form.hydrate_water or 0),
        solution_basis=form.solution_basis,
        solution_value=float(form.solution_value or 0),
        active_share_pct=float(form.active_share_pct) if form.active_share_pct else None,
        assay_pct=float(bottle.assay_pct) if bottle.assay_pct is not None else None,
        assay_of=bottle.assay_of,
        assay_kind=bottle.assay_kind,
        density_g_per_ml=density_of(bottle),
    )


def density_of(bottle: Bottle) -> float | None:
    """The label's density [g/mL], else the substance's; None when neither is known.

    A solution is never given the density of what is dissolved in it.
    """
    if bottle.density_g_per_ml is not None:
        return float(bottle.density_g_per_ml)
    own = bottle.form.substance.density_g_per_ml
    if own is None or bottle.form.kind == "solution":
        return None
    return float(own)
