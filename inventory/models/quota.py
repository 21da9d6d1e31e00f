"""How much of a substance a project may claim in a period."""

from django.db import models
from django.db.models import F, Q

from inventory.models.checks import MeasuredBy, one_of, whole_number
from inventory.models.substance import Substance
from labplan.base.models import Project


class Quota(models.Model):
    """At most `amount` of a substance for a project, from one day to another, both included."""

    project = models.ForeignKey(Project, models.PROTECT, related_name="quotas")
    substance = models.ForeignKey(Substance, models.PROTECT, related_name="quotas")
    starts_on = models.DateField()
    ends_on = models.DateField()
    measured_by = models.CharField(max_length=8, choices=MeasuredBy)
    amount = models.BigIntegerField()
    actor_code = models.CharField(max_length=24)
    reason = models.CharField(max_length=160, blank=True)
    created_at = models.DateTimeField()
    version = models.PositiveIntegerField(default=1)

    class Meta:
        constraints = [
            one_of("measured_by", MeasuredBy, name="quota_measured_by_known"),
            whole_number("amount", lowest=0, name="quota_amount_whole"),
            models.CheckConstraint(
                condition=Q(starts_on__lte=F("ends_on")), name="quota_period_runs_forward"
            ),
            models.UniqueConstraint(
                fields=["project", "substance", "starts_on", "ends_on"], name="quota_once"
            ),
        ]
