"""The requested procedure and its documents."""

from django.db import models
from django.db.models import Q

from labplan.base.append_only import AppendOnlyModel
from labplan.base.models import Project
from labplan.procedures import life, progress


class Procedure(models.Model):
    """One request for a glycoside, from the wish to the flask."""

    code = models.CharField(max_length=16, unique=True)
    project = models.ForeignKey(Project, models.PROTECT, related_name="procedures")
    requested_by = models.CharField(max_length=24)  # a person's code
    target_smiles = models.TextField()
    product_mass_mg = models.DecimalField(max_digits=12, decimal_places=3, null=True)
    acceptor_amount_mmol = models.DecimalField(max_digits=12, decimal_places=6, null=True)
    # substance codes the requester insists on; empty leaves the choice to labplan
    promoter = models.CharField(max_length=80, blank=True)
    solvent = models.CharField(max_length=80, blank=True)
    state = models.CharField(max_length=10, choices=[(s, s) for s in life.STATES])
    reasons = models.TextField(default="[]")  # [{code, detail}], for lists
    attempt = models.PositiveSmallIntegerField(default=0)
    # attempts that were begun and never ended, well or badly: they took their process with them
    broken_off = models.PositiveSmallIntegerField(default=0)
    phase = models.CharField(max_length=10, default=progress.WAITING)
    reservation_code = models.UUIDField(null=True, unique=True)
    # what the stock took back of its reservation, [{line, bottle, amount, why}]
    lost_holds = models.TextField(default="[]")
    document = models.ForeignKey("Document", models.PROTECT, null=True, related_name="+")
    version = models.PositiveIntegerField(default=1)
    created_at = models.DateTimeField()
    settled_at = models.DateTimeField(null=True)

    class Meta:
        constraints = [
            models.CheckConstraint(
                condition=Q(state__in=life.STATES), name="procedure_state_known"
            ),
            models.CheckConstraint(
                condition=Q(phase__in=progress.PHASES), name="procedure_phase_known"
            ),
            models.CheckConstraint(
                # NULL > 0 passes a CHECK, hence "is not null". The upper bounds also keep text
                # out: SQLite sorts it above every number.
                condition=Q(
                    product_mass_mg__isnull=False,
                    product_mass_mg__gt=0,
                    product_mass_mg__lt=10**9,
                    acceptor_amount_mmol__isnull=True,
                )
                | Q(
                    product_mass_mg__isnull=True,
                    acceptor_amount_mmol__isnull=False,
                    acceptor_amount_mmol__gt=0,
                    acceptor_amount_mmol__lt=10**6,
                ),
                name="procedure_has_one_scale",
            ),
            models.CheckConstraint(
                condition=~Q(state__in=[life.PLANNED, life.APPROVED, life.RUNNING])
                | (Q(reservation_code__isnull=False) & Q(document__isnull=False)),
                name="procedure_planned_holds",
            ),
        ]
        indexes = [
            models.Index(fields=["project", "-id"], name="procedure_by_project"),
            models.Index(fields=["id"], condition=Q(state=life.QUEUED), name="procedure_queued"),
        ]

    def __str__(self) -> str:
        return self.code


class Document(AppendOnlyModel):
    """The canonical bytes of a plan, never serialised again."""

    procedure = models.ForeignKey(Procedure, models.PROTECT, related_name="documents")
    attempt = models.PositiveSmallIntegerField()
    body = models.BinaryField()
    sha256 = models.CharField(max_length=64)
    # the newest seal when it was stored, as it is printed on the sheet; empty before the first
    seal = models.CharField(max_length=40, blank=True)
    created_at = models.DateTimeField()

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["procedure", "attempt"], name="document_attempt_once"),
        ]
