"""Reservations: sets of holds that stand or fall together."""

from datetime import date

from django.db import models
from django.db.models import F, Q

from inventory.models.bottle import Bottle
from inventory.models.checks import one_of, whole_number
from labplan.base.models import Project


class ReservationState(models.TextChoices):
    OPEN = "open"
    CLOSED = "closed"


class Reservation(models.Model):
    State = ReservationState
    code = models.UUIDField(unique=True)
    project = models.ForeignKey(Project, models.PROTECT, related_name="reservations")
    actor_code = models.CharField(max_length=24)
    # whose it is, in the words of the app that asked; the stock does not read it
    purpose = models.CharField(max_length=120)
    state = models.CharField(max_length=8, choices=ReservationState, default=ReservationState.OPEN)
    # approved by somebody: what is not is given up first when a bottle turns out to hold less
    is_firm = models.BooleanField(default=False)
    expires_on = models.DateField()
    created_at = models.DateTimeField()
    version = models.PositiveIntegerField(default=1)

    class Meta:
        constraints = [one_of("state", ReservationState, name="reservation_state_known")]
        indexes = [models.Index(fields=["project", "-id"], name="reservation_by_project")]

    def is_overdue(self, today: date) -> bool:
        """Whether it still holds something after its last day; a day counts to its end."""
        return self.state == ReservationState.OPEN and self.expires_on < today


class HoldState(models.TextChoices):
    OPEN = "open"
    USED = "used"
    RELEASED = "released"
    LAPSED = "lapsed"
    CANCELLED = "cancelled"


class Hold(models.Model):
    """An amount of one bottle set aside; closed when used + given back = amount."""

    State = HoldState
    reservation = models.ForeignKey(Reservation, models.PROTECT, related_name="holds")
    line = models.PositiveSmallIntegerField()
    bottle = models.ForeignKey(Bottle, models.PROTECT, related_name="holds")
    amount = models.BigIntegerField()
    used = models.BigIntegerField(default=0)
    given_back = models.BigIntegerField(default=0)
    state = models.CharField(max_length=10, choices=HoldState, default=HoldState.OPEN)

    class Meta:
        constraints = [
            one_of("state", HoldState, name="hold_state_known"),
            whole_number("amount", lowest=1, name="hold_amount_whole"),
            whole_number("used", lowest=0, name="hold_used_whole"),
            whole_number("given_back", lowest=0, name="hold_given_back_whole"),
            models.CheckConstraint(
                condition=Q(amount__gte=F("used") + F("given_back")), name="hold_not_over"
            ),
            models.CheckConstraint(
                condition=Q(state="open") | Q(amount=F("used") + F("given_back")),
                name="hold_closed_is_settled",
            ),
            models.UniqueConstraint(fields=["reservation", "line"], name="hold_line_once"),
        ]
        indexes = [
            models.Index(fields=["bottle"], condition=Q(state="open"), name="hold_open_by_bottle")
        ]
