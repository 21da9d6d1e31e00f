"""Reservations and their holds, as far as the actor's projects reach."""

import uuid
from dataclasses import dataclass
from datetime import date

from django.db.models import Exists, OuterRef, QuerySet

from inventory.models import Hold, Notice, Quota, Reservation
from labplan.base.errors import NotFound
from labplan.base.rights import Actor, visible_project_ids


@dataclass(frozen=True)
class ReservationFilter:
    """What a project asks. Days are included; None or empty leaves it open.

    `bottle` and `substance` are those on which something is still held.
    """

    project: str = ""
    state: str = ""
    actor: str = ""
    bottle: str = ""
    substance: str = ""
    expires_from: date | None = None
    expires_until: date | None = None


def visible_reservations(
    *, actor: Actor, wanted: ReservationFilter | None = None
) -> QuerySet[Reservation]:
    mine, wanted = visible_project_ids(actor, "reservation.view"), wanted or ReservationFilter()
    found = Reservation.objects.select_related("project").prefetch_related("holds__bottle")
    if mine is not None:
        found = found.filter(project__in=mine)
    plain = {
        "project__code": wanted.project,
        "state": wanted.state,
        "actor_code": wanted.actor,
        "expires_on__gte": wanted.expires_from,
        "expires_on__lte": wanted.expires_until,
    }
    found = found.filter(**{name: value for name, value in plain.items() if value})
    held = {"bottle__code": wanted.bottle, "bottle__form__substance__code": wanted.substance}
    for name, value in held.items():
        if value:
            holds = Hold.objects.filter(reservation=OuterRef("pk"), state=Hold.State.OPEN)
            found = found.filter(Exists(holds.filter(**{name: value})))
    return found


def get_reservation(*, actor: Actor, code: uuid.UUID) -> Reservation:
    """One reservation; one of another project is answered like one that is not there."""
    found = visible_reservations(actor=actor).filter(code=code).first()
    if found is None:
        raise NotFound(f"There is no reservation {code}.")
    return found


def held_lines(*, code: uuid.UUID) -> QuerySet[Hold]:
    """The holds of one reservation, for the app that made it."""
    return Hold.objects.filter(reservation__code=code).select_related("bottle").order_by("line")


def overdue_codes(*, today: date) -> list[uuid.UUID]:
    """The reservations that still hold something after their last day, oldest first."""
    found = Reservation.objects.filter(state=Reservation.State.OPEN, expires_on__lt=today)
    return list(found.order_by("expires_on", "pk").values_list("code", flat=True))


def visible_quotas(*, actor: Actor, project: str = "", substance: str = "") -> QuerySet[Quota]:
    mine = visible_project_ids(actor, "quota.view")
    found = Quota.objects.select_related("project", "substance")
    if mine is not None:
        found = found.filter(project__in=mine)
    if project:
        found = found.filter(project__code=project)
    return found.filter(substance__code=substance) if substance else found


def own_notices(*, actor: Actor, unread: bool = False) -> QuerySet[Notice]:
    """What the stock has to tell the actor; nobody else reads it."""
    found = Notice.objects.filter(person_code=actor.code).select_related("project")
    return found.filter(read_at=None) if unread else found
