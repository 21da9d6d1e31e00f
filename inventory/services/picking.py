"""Choose bottles for an amount of a substance. No writes."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from decimal import Decimal
from math import ceil

from inventory.errors import NotConvertible
from inventory.models import Bottle, Form, Reading
from inventory.quantities import Asked, quantity_of
from inventory.selectors.shelf import latest_readings
from labplan.chemistry.readings import reading_counts

# What a sum of shares may be off by.
_NOTHING = Decimal("1e-9")
# An amount of these is not an amount of the substance itself: they are named or left out.
_DILUTED = (Form.Kind.SOLUTION, Form.Kind.LOADED)


@dataclass(frozen=True)
class Wanted:
    """What a bottle must be like. None or empty leaves it open; what is not known is not enough."""

    form: str = ""  # label of the form
    assay_pct_min: Decimal | None = None
    water_ppm_max: Decimal | None = None
    stabilisers: tuple[str, ...] | None = None  # names allowed; "none" for without


ANY = Wanted()


@dataclass(frozen=True)
class Candidate:
    bottle: Bottle
    usable: int
    needed: int


@dataclass(frozen=True)
class Picked:
    """How much of which bottle, each in its own base unit; `missing` is the part not met."""

    parts: tuple[tuple[Bottle, int], ...]
    missing: Decimal  # of the amount asked for, from 0 to 1
    fit: int  # how many bottles are fit for it, empty ones included


def candidates_for(
    substance_code: str, asked: Asked, wanted: Wanted, *, on_day: date
) -> list[Candidate]:
    """The bottles that may be used for it on that day, the one to be used first in front.

    First to expire, already open before new, smallest rest, code.
    """
    bottles = list(
        Bottle.objects.filter(form__substance__code=substance_code, status=Bottle.Status.USABLE)
        .select_related("form__substance", "balance")
        .order_by("code")
    )
    readings = latest_readings([bottle.pk for bottle in bottles])
    found = []
    for bottle in bottles:
        water = readings.get((bottle.pk, Reading.Kind.WATER_PPM))
        if not _is_fit(bottle, wanted, water, on_day):
            continue
        try:
            needed = quantity_of(bottle, asked).amount
        except NotConvertible:
            continue
        balance = bottle.balance
        usable = max(0, balance.on_hand - balance.held - bottle.heel)
        found.append(Candidate(bottle, usable, needed))
    return sorted(found, key=_first_to_use)


def pick(candidates: Sequence[Candidate]) -> Picked:
    """One bottle rather than two, and so on: as few as will do, the first in front."""
    there = [c for c in candidates if c.usable >= max(c.bottle.least_dispensed, 1)]
    fewest = _fewest(there)
    missing, parts = Decimal(1), []
    for number, candidate in enumerate(there):
        if missing == 0 or len(parts) == fewest:
            break
        others = sorted(map(_share, there[number + 1 :]), reverse=True)
        after_it = sum(others[: fewest - len(parts) - 1], min(_share(candidate), missing))
        without_it = sum(others[: fewest - len(parts)], Decimal(0))
        if after_it < missing <= without_it:
            continue  # with it one bottle more would be needed
        share, amount = _part(candidate, missing)
        if amount:
            parts.append((candidate.bottle, amount))
            missing -= share
    return Picked(tuple(parts), missing, len(candidates))


def _part(candidate: Candidate, missing: Decimal) -> tuple[Decimal, int]:
    """The share of the whole that is taken from a bottle, and its amount; at least what can be."""
    wanted = ceil(candidate.needed * missing - _NOTHING)  # upwards: never a base unit too few
    amount = max(wanted, candidate.bottle.least_dispensed)
    if amount <= candidate.usable:
        return missing, amount
    return min(missing, _share(candidate)), candidate.usable


def _is_fit(
    bottle: Bottle, wanted: Wanted, water: tuple[Decimal, date] | None, on_day: date
) -> bool:
    if bottle.expires_on is not None and bottle.expires_on < on_day:
        return False
    if wanted.form:
        if bottle.form.label != wanted.form:
            return False
    elif bottle.form.kind in _DILUTED:
        return False
    if wanted.assay_pct_min is not None and (
        bottle.assay_pct is None or bottle.assay_pct < wanted.assay_pct_min
    ):
        return False
    return _is_dry(bottle, wanted, water, on_day) and _is_stabilised_as(bottle, wanted)


def _is_dry(
    bottle: Bottle, wanted: Wanted, water: tuple[Decimal, date] | None, on_day: date
) -> bool:
    if wanted.water_ppm_max is None:
        return True
    if water is None:
        return False
    ppm, read_on = water
    counts = reading_counts(read_on=read_on, opened_on=bottle.opened_on, as_of=on_day)
    return counts and ppm <= wanted.water_ppm_max


def _is_stabilised_as(bottle: Bottle, wanted: Wanted) -> bool:
    if wanted.stabilisers is None:
        return True
    if bottle.stabiliser_state == Bottle.StabiliserState.UNKNOWN:
        return False
    name = bottle.stabiliser_name.casefold() or "none"
    return name in {allowed.casefold() for allowed in wanted.stabilisers}


def _first_to_use(candidate: Candidate) -> tuple[date, bool, int, str]:
    bottle = candidate.bottle
    return (
        bottle.expires_on or date.max,
        bottle.opened_on is None,
        candidate.usable,
        bottle.code,
    )


def _share(candidate: Candidate) -> Decimal:
    """Which part of the whole amount this bottle could give."""
    return Decimal(candidate.usable) / candidate.needed


def _fewest(there: Sequence[Candidate]) -> int:
    """How many bottles are needed at least; all of them where even these are not enough."""
    total = Decimal(0)
    for number, share in enumerate(sorted(map(_share, there), reverse=True), start=1):
        total += share
        if total >= 1:
            return number
    return len(there)
