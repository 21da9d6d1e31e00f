"""Reservations and their holds, as far as the actor's projects reach."""

import uuid
from datetime import date

from django.db.models import QuerySet

from inventory.models import Hold, Reservation
from labplan.base.rights import Actor, visible_project_ids


def visible_reservations(*, actor: Actor) -> QuerySet[Reservation]:
    mine = visible_project_ids(actor, "reservation.view")
    found = Reservation.objects.select_related("project").prefetch_related("holds__bottle")
    return found if mine is None else found.filter(project__in=mine)


def held_lines(*, code: uuid.UUID) -> QuerySet[Hold]:
    """The holds of one reservation, for the app that made it."""
    return Hold.objects.filter(reservation__code=code).select_related("bottle").order_by("line")


def overdue_codes(*, today: date) -> list[uuid.UUID]:
    """The reservations that still hold something after their last day, oldest first."""
    found = Reservation.objects.filter(state=Reservation.State.OPEN, expires_on__lt=today)
    return list(found.order_by("expires_on", "pk").values_list("code", flat=True))
