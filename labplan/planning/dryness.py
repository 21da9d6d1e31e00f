"""Count the water in the flask against the promoter and the donor."""

from datetime import date

from labplan.chemistry.amounts import mass_mg_of_volume
from labplan.chemistry.masses import WATER_MOLAR_MASS_G_PER_MOL
from labplan.planning.bottles import water_now_ppm
from labplan.planning.figures import in_sentence, mass_text
from labplan.planning.values import Charge, RouteWarning, Water

# Warn over 25 % of a stoichiometric promoter, 10 % of a catalytic one, 5 % of the donor
# (common practice).
STOICHIOMETRIC_LIMIT_PCT = 25
CATALYTIC_LIMIT_PCT = 10
DONOR_LIMIT_PCT = 5


def water_of(
    charges: list[Charge], *, promoter_mmol: float, donor_mmol: float, as_of: date,
) -> Water:  # fmt: skip
    """Sum the water [mmol] that the liquid and measured charges bring."""
    lines = tuple(
        (charge.key, _water_mmol(charge, as_of)) for charge in charges if _can_be_wet(charge)
    )
    total = sum(mmol for _, mmol in lines if mmol is not None)
    return Water(
        lines=lines,
        total_mmol=total,
        promoter_share_pct=100 * total / promoter_mmol,
        donor_share_pct=100 * total / donor_mmol,
    )


def _can_be_wet(charge: Charge) -> bool:
    has_reading = charge.bottle is not None and charge.bottle.water_ppm is not None
    return has_reading or charge.role in ("solvent", "acceptor") or _hydrate_mmol(charge) > 0


def _hydrate_mmol(charge: Charge) -> float:
    """The water of crystallisation that a charge brings, as of bismuth triflate tetrahydrate."""
    if charge.bottle is None or charge.bottle.content is None or charge.amount_mmol is None:
        return 0.0
    return charge.amount_mmol * charge.bottle.content.hydrate_water


def _water_mmol(charge: Charge, as_of: date) -> float | None:
    bottle = charge.bottle
    if bottle is None:
        return None
    hydrate = _hydrate_mmol(charge)
    if hydrate:
        return hydrate
    ppm = water_now_ppm(bottle, as_of)
    mass = charge.mass_mg
    if mass is None and bottle.density_g_per_ml is not None and charge.volume_ml is not None:
        mass = mass_mg_of_volume(charge.volume_ml, bottle.density_g_per_ml)
    if ppm is None or mass is None:
        return None
    return mass * ppm / 1e6 / WATER_MOLAR_MASS_G_PER_MOL


def dryness_warnings(
    water: Water,
    charges: dict[str, Charge],
    *,
    catalytic: bool,
    used_up_per_water: float,
    yield_pct: float,
) -> list[RouteWarning]:
    """Say what the water costs where it matters, what to dry, and where no reading counts."""
    limit = CATALYTIC_LIMIT_PCT if catalytic else STOICHIOMETRIC_LIMIT_PCT
    found = []
    if water.promoter_share_pct > limit:
        costs = (
            f"The water counted takes {water.promoter_share_pct:.1f} % of the promoter"
            if used_up_per_water
            else f"The water counted is {water.promoter_share_pct:.0f} % of the promoter by "
            "amount: it does not use it up but slows it and makes a protic acid of it"
        )
        found.append(
            RouteWarning(
                "water_takes_promoter",
                "caution",
                f"{costs} (limit {limit} %): {_what_to_dry(water, charges)}.",
            )
        )
    if water.donor_share_pct > DONOR_LIMIT_PCT:
        left_pct = yield_pct * max(1 - water.donor_share_pct / 100, 0.0)
        found.append(
            RouteWarning(
                "water_takes_donor",
                "caution",
                f"The water counted could take {water.donor_share_pct:.1f} % of the donor as "
                f"hemiacetal (limit {DONOR_LIMIT_PCT} %). The yield printed is that of a dry run: "
                f"as charged it may be {left_pct:.0f} % instead of {yield_pct:.0f} %. First "
                f"{_what_to_dry(water, charges)}.",
            )
        )
    unknown = [charges[key] for key, mmol in water.lines if mmol is None]
    if unknown:
        bottles = ", ".join(f"{c.name} ({c.bottle.code})" for c in unknown if c.bottle)
        found.append(
            RouteWarning(
                "water_unknown",
                "caution",
                f"No water reading counts for {bottles}: measure it before you start; the sum "
                "does not include it.",
            )
        )
    return found


def _what_to_dry(water: Water, charges: dict[str, Charge]) -> str:
    """The charge that brings the most water; of a dried hydrate, what is then weighed."""
    key, _ = max(water.lines, key=lambda line: line[1] or 0.0)
    charge = charges[key]
    bottle = charge.bottle
    code = f" ({bottle.code})" if bottle else ""
    name = in_sentence(charge.name)
    if not _hydrate_mmol(charge) or bottle is None or bottle.content is None:
        return f"dry the {name}{code} over activated sieves, or take a drier bottle"
    dry_mg = (charge.amount_mmol or 0.0) * bottle.content.molar_mass_g_per_mol
    return (
        f"dry the {name}{code} to constant mass in vacuum at 100 °C and then weigh "
        f"{mass_text(dry_mg)} of it in place of {mass_text(charge.mass_mg or 0.0)}, or take a "
        "bottle without water of crystallisation"
    )
