"""Bottles, where they stand and what was measured on them."""

from django.db import models
from django.db.models import Q

from inventory.models.checks import MeasuredBy as MeasuredByChoices
from inventory.models.checks import one_of, whole_number
from inventory.models.substance import Form


class Place(models.Model):
    code = models.SlugField(max_length=24, unique=True)
    name = models.CharField(max_length=120)
    is_locked = models.BooleanField(default=False)
    temperature_c = models.DecimalField(max_digits=5, decimal_places=1, null=True)

    def __str__(self) -> str:
        return self.code


class BottleAssayKind(models.TextChoices):
    TITRATION = "titration"
    QNMR = "qnmr"
    AGAINST_STANDARD = "against_standard"
    AREA_PCT = "area_pct"
    UNSPECIFIED = "unspecified"


class BottleStabiliserState(models.TextChoices):
    NONE = "none"
    KNOWN = "known"
    UNKNOWN = "unknown"
    NOT_APPLICABLE = "not_applicable"


class BottleStatus(models.TextChoices):
    USABLE = "usable"
    QUARANTINED = "quarantined"
    DISPOSED = "disposed"


class Bottle(models.Model):
    """One physical bottle. Whether it is weighed or measured is settled at receipt."""

    MeasuredBy = MeasuredByChoices
    AssayKind = BottleAssayKind
    StabiliserState = BottleStabiliserState
    Status = BottleStatus
    code = models.CharField(max_length=24, unique=True)
    form = models.ForeignKey(Form, models.PROTECT, related_name="bottles")
    parent = models.ForeignKey("self", models.PROTECT, null=True, related_name="children")
    measured_by = models.CharField(max_length=8, choices=MeasuredByChoices)
    # the line of the parent's book by which this bottle was filled
    parent_movement = models.ForeignKey(
        "inventory.Movement", models.PROTECT, null=True, related_name="+"
    )
    # what was done to it in the house ("dried over 3A sieves"); empty for what came as it is
    preparation = models.CharField(max_length=120, blank=True)
    # what cannot be got out of the bottle, in its base unit
    heel = models.BigIntegerField()
    # less than this is never set aside or decanted, in its base unit
    least_dispensed = models.BigIntegerField(default=0)
    # of the empty bottle with its cap, for counting by weight; None until somebody weighed it
    tare_ug = models.BigIntegerField(null=True)
    lot = models.CharField(max_length=60, blank=True)
    supplier = models.CharField(max_length=80, blank=True)
    assay_pct = models.DecimalField(max_digits=7, decimal_places=4, null=True)
    # "as_is", "anhydrous", "hydrate", or a formula such as BF3
    assay_of = models.CharField(max_length=40, default="as_is")
    assay_kind = models.CharField(
        max_length=20, choices=BottleAssayKind, default=BottleAssayKind.UNSPECIFIED
    )
    density_g_per_ml = models.DecimalField(max_digits=7, decimal_places=4, null=True)
    density_temperature_c = models.DecimalField(max_digits=5, decimal_places=1, null=True)
    stabiliser_state = models.CharField(max_length=16, choices=BottleStabiliserState)
    stabiliser_name = models.CharField(max_length=60, blank=True)
    stabiliser_amount_pct = models.DecimalField(max_digits=9, decimal_places=6, null=True)
    stabiliser_basis = models.CharField(max_length=4, blank=True)  # w/w or v/v
    place = models.ForeignKey(Place, models.PROTECT, related_name="bottles")
    received_on = models.DateField()
    opened_on = models.DateField(null=True)
    expires_on = models.DateField(null=True)
    status = models.CharField(max_length=12, choices=BottleStatus, default=BottleStatus.USABLE)
    note = models.CharField(max_length=200, blank=True)
    version = models.PositiveIntegerField(default=1)

    class Meta:
        constraints = [
            one_of("measured_by", MeasuredByChoices, name="bottle_measured_by_known"),
            one_of("status", BottleStatus, name="bottle_status_known"),
            one_of("assay_kind", BottleAssayKind, name="bottle_assay_kind_known"),
            one_of("stabiliser_state", BottleStabiliserState, name="bottle_stabiliser_known"),
            whole_number("heel", lowest=0, name="bottle_heel_whole"),
            whole_number("least_dispensed", lowest=0, name="bottle_least_whole"),
            whole_number("tare_ug", lowest=0, name="bottle_tare_whole"),
            models.CheckConstraint(
                condition=Q(parent_movement__isnull=True) | Q(parent__isnull=False),
                name="bottle_lineage_has_parent",
            ),
            models.CheckConstraint(
                condition=Q(assay_pct__isnull=True) | (Q(assay_pct__gt=0) & Q(assay_pct__lte=100)),
                name="bottle_assay_in_range",
            ),
            models.CheckConstraint(
                # The upper bound also keeps text out: SQLite sorts it above every number.
                condition=Q(density_g_per_ml__isnull=True)
                | (Q(density_g_per_ml__gt=0) & Q(density_g_per_ml__lte=25)),
                name="bottle_density_positive",
            ),
        ]

    def __str__(self) -> str:
        return self.code


class ReadingKind(models.TextChoices):
    WATER_PPM = "water_ppm"  # by mass
    ASSAY_PCT = "assay_pct"
    PEROXIDE_PPM = "peroxide_ppm"
    ACTIVATION_C = "activation_c"


class Reading(models.Model):
    """One measurement on a bottle: dryness, assay, peroxide, or when sieves were activated."""

    Kind = ReadingKind
    bottle = models.ForeignKey(Bottle, models.PROTECT, related_name="readings")
    kind = models.CharField(max_length=16, choices=ReadingKind)
    value = models.DecimalField(max_digits=12, decimal_places=4)
    method = models.CharField(max_length=60, blank=True)
    read_on = models.DateField()
    actor_code = models.CharField(max_length=24)
    recorded_at = models.DateTimeField()

    class Meta:
        constraints = [
            one_of("kind", ReadingKind, name="reading_kind_known"),
            models.CheckConstraint(
                condition=Q(value__gte=0) & Q(value__lte=10**8), name="reading_not_negative"
            ),
        ]
        indexes = [models.Index(fields=["bottle", "kind", "-read_on"], name="reading_latest")]
