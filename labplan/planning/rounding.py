"""Round an amount to what a balance or a syringe can give."""

import math

# Common practice: a balance read to 0.1 mg, least 200 times that; solids dosed to 1 mg.
BALANCE_READABILITY_MG = 0.1
LEAST_WEIGHABLE_MG = 200 * BALANCE_READABILITY_MG
SOLID_STEP_MG = 1.0
LEAST_VOLUME_ML = 0.05


def volume_step_ml(volume_ml: float) -> float:
    """0.01 mL under 5 mL, 0.1 mL to 50 mL, 1 mL above."""
    if volume_ml < 5:
        return 0.01
    return 0.1 if volume_ml <= 50 else 1.0


def round_mass_mg(mass_mg: float, *, outward: bool = False) -> float:
    return round_to_step(mass_mg, SOLID_STEP_MG, outward=outward)


def round_volume_ml(volume_ml: float, *, outward: bool = False) -> float:
    return round_to_step(volume_ml, volume_step_ml(volume_ml), outward=outward)


def round_bulk_mg(mass_mg: float) -> float:
    """Salts, sieves and silica: to 10 mg under 10 g, 0.1 g under 100 g, 1 g above."""
    step = 10.0 if mass_mg < 10_000 else 100.0 if mass_mg < 100_000 else 1000.0
    return round_to_step(mass_mg, step)


def round_to_step(value: float, step: float, *, outward: bool = False) -> float:
    """The nearest multiple of `step`, or the next one up; halves go up.

    >>> round_to_step(90.246, 1.0, outward=True), round_to_step(3.5092, 0.01)
    (91.0, 3.51)
    """
    # The small allowance keeps 91.00000000001 from becoming 92.
    steps = math.ceil(value / step - 1e-9) if outward else math.floor(value / step + 0.5)
    return round(steps * step, 6)
