"""Substances, bottles and places, for lists and single looks."""

from dataclasses import dataclass
from datetime import date
from decimal import Decimal

from django.db.models import Exists, F, OuterRef, Q, QuerySet
from django.db.models.functions import Greatest

from inventory.models import Bottle, Place, Reading, Substance
from inventory.quantities import converted
from labplan.base import clock
from labplan.base.errors import NotFound
from labplan.base.rights import Actor, require
from labplan.chemistry.reference import search_key


def list_substances(
    *, actor: Actor, name: str = "", cas: str = "", under_minimum: bool = False
) -> QuerySet[Substance]:
    require(actor, "stock.view")
    found = Substance.objects.all()
    if name:
        found = found.filter(search_key__contains=search_key(name))
    if under_minimum:
        found = found.filter(pk__in=substances_under_minimum())
    return found.filter(cas=cas) if cas else found


@dataclass(frozen=True)
class BottleFilter:
    """What a stockroom asks. Days are included; None or empty leaves it open."""

    substance: str = ""
    place: str = ""
    status: str = ""
    expires_from: date | None = None
    expires_until: date | None = None
    water_ppm_above: Decimal | None = None
    under_minimum: bool = False
    parent: str = ""


def list_bottles(*, actor: Actor, wanted: BottleFilter | None = None) -> QuerySet[Bottle]:
    """Bottles with their balance and what can be used of them (`usable`)."""
    require(actor, "stock.view")
    found, wanted = _with_usable(), wanted or BottleFilter()
    plain = {
        "form__substance__code": wanted.substance,
        "place__code": wanted.place,
        "status": wanted.status,
        "expires_on__gte": wanted.expires_from,
        "expires_on__lte": wanted.expires_until,
        "parent__code": wanted.parent,
    }
    found = found.filter(**{name: value for name, value in plain.items() if value})
    if wanted.water_ppm_above is not None:
        found = found.filter(_is_wetter_than(wanted.water_ppm_above))
    if wanted.under_minimum:
        found = found.filter(form__substance__in=substances_under_minimum())
    return found


def _is_wetter_than(limit_ppm: Decimal) -> Exists:
    """The latest water reading of the bottle is above the limit."""
    readings = Reading.objects.filter(kind=Reading.Kind.WATER_PPM)
    later = readings.filter(bottle=OuterRef("bottle")).filter(
        Q(read_on__gt=OuterRef("read_on")) | Q(read_on=OuterRef("read_on"), id__gt=OuterRef("id"))
    )
    return Exists(readings.filter(~Exists(later), bottle=OuterRef("pk"), value__gt=limit_ppm))


def substances_under_minimum() -> list[int]:
    """The substances of which less can be used today than the stockroom wants to have.

    Bottles of another measure count by their density; without one they do not count.
    """
    wanted = {s.pk: s for s in Substance.objects.filter(minimum__isnull=False)}
    there: dict[int, int] = dict.fromkeys(wanted, 0)
    today = clock.today()
    bottles = _with_usable().filter(form__substance__in=wanted, status=Bottle.Status.USABLE)
    for bottle in bottles.exclude(expires_on__lt=today):
        substance = wanted[bottle.form.substance_id]
        amount = converted(
            bottle, bottle.usable, given_by=bottle.measured_by,
            wanted_by=substance.minimum_measured_by,
        )  # fmt: skip
        there[substance.pk] += amount or 0
    return [pk for pk, amount in there.items() if amount < (wanted[pk].minimum or 0)]


def get_bottle(*, actor: Actor, code: str) -> Bottle:
    require(actor, "stock.view")
    bottle = _with_usable().filter(code=code).first()
    if bottle is None:
        raise NotFound(f"There is no bottle {code}.")
    return bottle


def get_substance(*, actor: Actor, code: str) -> Substance:
    found = list_substances(actor=actor).filter(code=code).first()
    if found is None:
        raise NotFound(f"There is no substance {code}.")
    return found


def readings_of(*, actor: Actor, bottle_code: str) -> QuerySet[Reading]:
    """What was measured on a bottle. Raises NotFound."""
    return Reading.objects.filter(bottle=get_bottle(actor=actor, code=bottle_code))


def list_places(*, actor: Actor) -> QuerySet[Place]:
    require(actor, "stock.view")
    return Place.objects.all()


def _with_usable() -> QuerySet[Bottle]:
    left = F("balance__on_hand") - F("balance__held") - F("heel")
    return Bottle.objects.select_related("form__substance", "balance", "place", "parent").annotate(
        usable=Greatest(left, 0)
    )
