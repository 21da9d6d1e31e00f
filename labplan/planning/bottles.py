"""Choose the bottle for a charge: one bottle, fit for the job, first to expire."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import date, timedelta

from labplan.chemistry.readings import reading_counts
from labplan.planning.figures import bulk_volume_text, mass_text
from labplan.planning.values import PassedOver, ShelfBottle

DRY_GRADE_PPM = 30
# One nanolitre in mL: what a sum of floats may be off by; the hold itself is in whole units.
BASE_UNIT = 1e-6
_ALCOHOLS = ("ethanol", "methanol", "alcohol", "propanol")

Check = Callable[[ShelfBottle, date], str | None]


@dataclass(frozen=True)
class Choice:
    """The bottle taken, what was passed over, and the most that any fit bottle could give."""

    bottle: ShelfBottle | None
    passed_over: tuple[PassedOver, ...]
    largest_text: str
    fit_exists: bool


def choose_bottle(
    bottles: Iterable[ShelfBottle],
    *,
    role: str,
    as_of: date,
    needed_in: Callable[[ShelfBottle], float | None],
    checks: tuple[Check, ...] = (),
    prefer_dry: bool = False,
) -> Choice:
    """Take the best bottle that holds enough. `needed_in` gives the amount in its own unit.

    The answer does not depend on the order of `bottles`.
    """
    passed: list[PassedOver] = []
    fit: list[tuple[ShelfBottle, float]] = []
    for bottle in sorted(bottles, key=lambda b: b.code):
        against = _against(bottle, as_of, checks)
        needed = needed_in(bottle) if against is None else None
        if against is None and needed is None:
            against = "its label does not say enough to size a charge (assay or density missing)"
        if against is not None:
            passed.append(PassedOver(bottle.code, bottle.name, role, against))
        else:
            fit.append((bottle, needed or 0.0))
    enough = [(b, need) for b, need in fit if b.usable >= need - BASE_UNIT]
    passed += [
        PassedOver(b.code, b.name, role, _too_little(b, need))
        for b, need in fit
        if b.usable < need - BASE_UNIT
    ]
    best = min(enough, key=lambda pair: _rank(pair[0], as_of, prefer_dry), default=None)
    return Choice(
        bottle=best[0] if best else None,
        passed_over=tuple(sorted(passed, key=lambda p: p.bottle)),
        largest_text=_largest_text([bottle for bottle, _ in fit]),
        fit_exists=bool(fit),
    )


def _largest_text(fit: list[ShelfBottle]) -> str:
    if not fit:
        return "none"
    largest = max(fit, key=lambda bottle: (bottle.usable, bottle.code))
    return _in_words(largest, max(largest.usable, 0.0))


def _too_little(bottle: ShelfBottle, needed: float) -> str:
    usable = _in_words(bottle, bottle.usable)
    return f"holds {usable} that can be used, {_in_words(bottle, needed)} is needed"


def _in_words(bottle: ShelfBottle, amount: float) -> str:
    if bottle.measured_by == "volume":
        return bulk_volume_text(amount)
    return mass_text(amount) if bottle.measured_by == "mass" else f"{amount:g} pieces"


def _against(bottle: ShelfBottle, as_of: date, checks: tuple[Check, ...]) -> str | None:
    for check in (check_usable, *checks):
        reason = check(bottle, as_of)
        if reason is not None:
            return reason
    return None


def _rank(bottle: ShelfBottle, as_of: date, prefer_dry: bool) -> tuple[object, ...]:
    """Pure before mixed anomers, dry grade where it counts (and spared where it does not).

    Then the first to expire, the one already open, the wettest where dryness does not count,
    and the smallest.
    """
    water = water_now_ppm(bottle, as_of)
    is_dry = water is not None and water <= DRY_GRADE_PPM
    wettest_first = 0.0 if prefer_dry or water is None else -water
    active_share_pct = bottle.content.active_share_pct if bottle.content else None
    return (
        active_share_pct is not None,
        is_dry != prefer_dry,
        bottle.expires_on or date.max,
        bottle.opened_on is None,
        wettest_first,
        bottle.usable,
        bottle.code,
    )


def check_usable(bottle: ShelfBottle, as_of: date) -> str | None:
    """Status and expiry; the expiry date itself is still valid."""
    if bottle.status != "usable":
        return f"is {bottle.status}"
    if bottle.expires_on is not None and bottle.expires_on < as_of:
        return f"expired on {bottle.expires_on.isoformat()}"
    return None


def check_no_alcohol_stabiliser(bottle: ShelfBottle, as_of: date) -> str | None:
    """An alcohol in the solvent is a competing acceptor; an unknown stabiliser may be one."""
    if bottle.stabiliser_state == "unknown":
        return "its stabiliser is not known; an alcohol would compete for the donor"
    name = bottle.stabiliser_name.lower()
    if bottle.stabiliser_state == "known" and any(word in name for word in _ALCOHOLS):
        return f"is stabilised with {bottle.stabiliser_name}, an alcohol that takes the donor"
    return None


def check_no_crystal_water(bottle: ShelfBottle, as_of: date) -> str | None:
    """Three moles of water a mole of sodium acetate would eat as much anhydride."""
    if bottle.content is not None and bottle.content.hydrate_water > 0:
        return "holds water of crystallisation, which takes the anhydride; take an anhydrous one"
    return None


def check_water_at_most(limit_ppm: float) -> Check:
    def check(bottle: ShelfBottle, as_of: date) -> str | None:
        water = water_now_ppm(bottle, as_of)
        if water is not None and water > limit_ppm:
            return f"holds {water:g} ppm of water; at most {limit_ppm:g} ppm here"
        return None

    return check


def check_activated_within(days: int) -> Check:
    def check(bottle: ShelfBottle, as_of: date) -> str | None:
        if bottle.activated_on is None:
            return "is not activated: it would bring water instead of taking it"
        if as_of - bottle.activated_on > timedelta(days=days):
            return f"was activated on {bottle.activated_on.isoformat()}, over {days} days ago"
        return None

    return check


def water_now_ppm(bottle: ShelfBottle, as_of: date) -> float | None:
    """The reading [ppm by mass] if it still counts, else None: unknown, to be measured."""
    if bottle.water_ppm is None or bottle.water_read_on is None:
        return None
    counts = reading_counts(read_on=bottle.water_read_on, opened_on=bottle.opened_on, as_of=as_of)
    return bottle.water_ppm if counts else None
