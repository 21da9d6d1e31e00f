"""What the stock tells a person when a fact has overtaken what was promised."""

from django.db import models

from inventory.models.checks import one_of
from labplan.base.models import Project


class NoticeKind(models.TextChoices):
    HOLD_CANCELLED = "hold_cancelled"


class Notice(models.Model):
    """One line for one person; read once it is marked so."""

    Kind = NoticeKind
    person_code = models.CharField(max_length=24)
    project = models.ForeignKey(Project, models.PROTECT, related_name="notices")
    kind = models.CharField(max_length=24, choices=NoticeKind)
    # codes of what it is about, for programs
    bottle_code = models.CharField(max_length=24)
    reservation_code = models.UUIDField()
    line = models.PositiveSmallIntegerField()
    detail = models.CharField(max_length=400)
    created_at = models.DateTimeField()
    read_at = models.DateTimeField(null=True)

    class Meta:
        constraints = [one_of("kind", NoticeKind, name="notice_kind_known")]
        indexes = [models.Index(fields=["person_code", "-id"], name="notice_by_person")]
