"""Substances, bottles and places, for lists and single looks."""

from django.db.models import F, QuerySet
from django.db.models.functions import Greatest

from inventory.models import Bottle, Place, Substance
from labplan.base.errors import NotFound
from labplan.base.rights import Actor, require
from labplan.chemistry.reference import search_key


def list_substances(*, actor: Actor, name: str = "", cas: str = "") -> QuerySet[Substance]:
    require(actor, "stock.view")
    found = Substance.objects.all()
    if name:
        found = found.filter(search_key__contains=search_key(name))
    return found.filter(cas=cas) if cas else found


def list_bottles(
    *, actor: Actor, substance: str = "", place: str = "", status: str = ""
) -> QuerySet[Bottle]:
    """Bottles with their balance and what can be used of them (`usable`)."""
    require(actor, "stock.view")
    found = _with_usable()
    if substance:
        found = found.filter(form__substance__code=substance)
    if place:
        found = found.filter(place__code=place)
    return found.filter(status=status) if status else found


def get_bottle(*, actor: Actor, code: str) -> Bottle:
    require(actor, "stock.view")
    bottle = _with_usable().filter(code=code).first()
    if bottle is None:
        raise NotFound(f"There is no bottle {code}.")
    return bottle


def list_places(*, actor: Actor) -> QuerySet[Place]:
    require(actor, "stock.view")
    return Place.objects.all()


def _with_usable() -> QuerySet[Bottle]:
    left = F("balance__on_hand") - F("balance__held") - F("heel")
    return Bottle.objects.select_related("form__substance", "balance", "place").annotate(
        usable=Greatest(left, 0)
    )
