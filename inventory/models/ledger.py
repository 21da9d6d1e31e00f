"""The book of each bottle and the balance it adds up to."""

from django.db import models
from django.db.models import F, Q

from inventory.models.bottle import Bottle
from inventory.models.checks import LARGEST_AMOUNT, one_of, whole_number
from inventory.models.reservation import Hold
from labplan.base.append_only import AppendOnlyModel
from labplan.base.models import Project


class Balance(models.Model):
    """One row a bottle, locked alone; nothing else in the stock is ever locked."""

    bottle = models.OneToOneField(Bottle, models.PROTECT, primary_key=True, related_name="balance")
    on_hand = models.BigIntegerField(default=0)
    held = models.BigIntegerField(default=0)
    seq = models.BigIntegerField(default=0)
    # Follows the bottle's status: a hold checks it under the lock that it takes anyway.
    is_usable = models.BooleanField(default=True)

    class Meta:
        constraints = [
            whole_number("on_hand", lowest=0, name="balance_on_hand_whole"),
            whole_number("held", lowest=0, name="balance_held_whole"),
            whole_number("seq", lowest=0, name="balance_seq_whole"),
            models.CheckConstraint(
                condition=Q(held__lte=F("on_hand")), name="balance_held_not_over"
            ),
        ]


class MovementKind(models.TextChoices):
    RECEIPT = "receipt"
    HOLD = "hold"
    USE = "use"
    RELEASE = "release"
    LAPSE = "lapse"
    RETURN = "return"
    DECANT_OUT = "decant_out"
    DECANT_IN = "decant_in"
    TRANSFER = "transfer"
    LOSS = "loss"
    CORRECTION = "correction"
    DISPOSAL = "disposal"


class Movement(AppendOnlyModel):
    """One line of a bottle's book, numbered without gaps, with both sums after it."""

    Kind = MovementKind
    bottle = models.ForeignKey(Bottle, models.PROTECT, related_name="movements")
    seq = models.BigIntegerField()
    kind = models.CharField(max_length=12, choices=MovementKind)
    on_hand_change = models.BigIntegerField()
    held_change = models.BigIntegerField()
    on_hand_after = models.BigIntegerField()
    held_after = models.BigIntegerField()
    # what the person typed or weighed, before any conversion
    entered_amount = models.CharField(max_length=40)
    entered_unit = models.CharField(max_length=12)
    density_g_per_ml = models.DecimalField(max_digits=7, decimal_places=4, null=True)
    density_source = models.CharField(max_length=120, blank=True)
    # of the substance itself, at the assay known then
    amount_nmol = models.BigIntegerField(null=True)
    hold = models.ForeignKey(Hold, models.PROTECT, null=True, related_name="movements")
    # of whoever asked, and the number of the line in it: sent twice, it is done once
    operation = models.UUIDField()
    part = models.PositiveIntegerField()
    project = models.ForeignKey(Project, models.PROTECT, null=True, related_name="movements")
    actor_code = models.CharField(max_length=24)
    reason = models.CharField(max_length=160, blank=True)
    booked_on = models.DateField()
    recorded_at = models.DateTimeField()

    class Meta:
        constraints = [
            one_of("kind", MovementKind, name="movement_kind_known"),
            models.UniqueConstraint(fields=["bottle", "seq"], name="movement_seq_once"),
            models.UniqueConstraint(fields=["operation", "part"], name="movement_operation_once"),
            whole_number("seq", lowest=1, name="movement_seq_whole"),
            whole_number("on_hand_after", lowest=0, name="movement_on_hand_whole"),
            whole_number("held_after", lowest=0, name="movement_held_whole"),
            whole_number("on_hand_change", lowest=-LARGEST_AMOUNT, name="movement_change_whole"),
            whole_number("held_change", lowest=-LARGEST_AMOUNT, name="movement_hold_whole"),
            whole_number("amount_nmol", lowest=0, name="movement_moles_whole"),
            models.CheckConstraint(
                condition=Q(held_after__lte=F("on_hand_after")), name="movement_held_not_over"
            ),
            models.CheckConstraint(
                condition=Q(kind__in=["receipt", "return", "decant_in"], on_hand_change__gt=0)
                | Q(kind__in=["use", "decant_out", "loss", "disposal"], on_hand_change__lt=0)
                | Q(kind__in=["hold", "release", "lapse", "transfer"], on_hand_change=0)
                | Q(kind="correction"),
                name="movement_sign_fits_kind",
            ),
            models.CheckConstraint(
                condition=Q(kind="hold", held_change__gt=0)
                | Q(kind__in=["release", "lapse"], held_change__lt=0)
                | Q(kind__in=["use", "loss", "disposal", "correction"], held_change__lte=0)
                | Q(
                    kind__in=["receipt", "return", "decant_in", "decant_out", "transfer"],
                    held_change=0,
                ),
                name="movement_hold_fits_kind",
            ),
        ]
        indexes = [
            models.Index(fields=["project", "booked_on"], name="movement_by_project"),
        ]
