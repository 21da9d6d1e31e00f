"""From which pressure a solvent leaves a rotary evaporator, by its vapour pressure.

log10(p/bar) = A - B / (C + t), t in °C. Constants as tabulated from handbook collections (Antoine
equation; read 2026-12-01 in a public table of them, not checked against the handbook itself).
"""

_ANTOINE = {
    "dichloromethane": (4.07622, 1070.07, 223.24),
    "ethyl-acetate": (4.21248, 1238.15, 217.205),
    "n-heptane": (4.02167, 1264.9, 216.544),
    "methanol": (5.15043, 1549.48, 236.642),
    # given in mmHg: A less log10(750.062)
    "toluene": (4.07954, 1344.80, 219.482),
    "acetonitrile": (4.19840, 1279.2, 224.01),
}
# The solvent boils this far below the bath, so that heat flows and the condenser keeps up.
BELOW_THE_BATH_K = 15.0


def vapour_pressure_mbar(substance: str, temperature_c: float) -> float:
    """Vapour pressure; KeyError for a solvent without constants."""
    a, b, c = _ANTOINE[substance]
    return float(1000 * 10 ** (a - b / (c + temperature_c)))


def pressure_mbar(substance: str, bath_c: float) -> float:
    """The pressure at which the solvent boils 15 K below the bath, to two figures.

    >>> pressure_mbar("dichloromethane", 40), pressure_mbar("toluene", 30)
    (580.0, 22.0)
    """
    return float(f"{vapour_pressure_mbar(substance, bath_c - BELOW_THE_BATH_K):.2g}")


def from_pressures(substances: tuple[str, ...], bath_c: float) -> str:
    """`dichloromethane from 580 mbar on, toluene from 38 mbar on`, as one works downwards."""
    falling = sorted(
        dict.fromkeys(substances), key=lambda name: -vapour_pressure_mbar(name, bath_c)
    )
    names = {name: name.removeprefix("n-").replace("-", " ") for name in falling}
    return ", ".join(
        f"{names[name]} from {pressure_mbar(name, bath_c):.0f} mbar on" for name in falling
    )
