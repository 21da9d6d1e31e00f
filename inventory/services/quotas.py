"""How much of a substance a project may still claim in a period."""

from collections import defaultdict
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from zoneinfo import ZoneInfo

from django.conf import settings
from django.db import transaction
from django.db.models import F, QuerySet, Sum

from inventory import locks
from inventory.errors import QuotaExceeded
from inventory.models import Bottle, Hold, Movement, Quota, Substance
from inventory.quantities import converted, in_words
from labplan.base import clock
from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.events import record_event
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.models import Project
from labplan.base.rights import Actor, require

# Whether a project has any quota today: most have none. Parameters: project, today, today.
QUOTA_TODAY = (
    "EXISTS (SELECT 1 FROM inventory_quota q WHERE q.project_id = %s AND q.starts_on <= %s "
    "AND q.ends_on >= %s)"
)
Claim = tuple[Bottle, int]  # an amount in the bottle's base unit


@dataclass(frozen=True)
class QuotaOrder:
    """What a project may claim at most; `amount` in the base unit of `measured_by`."""

    substance_code: str
    starts_on: date
    ends_on: date
    measured_by: str
    amount: int
    reason: str = ""


def set_quota(
    *, actor: Actor, project: Project, order: QuotaOrder, once: Once | None = None
) -> Quota:
    """Limit what a project may claim of a substance; the same period again changes its amount.

    Raises NotAllowed and InvalidValue. Safe to repeat.
    """
    require(actor, "quota.set")
    substance = Substance.objects.filter(code=order.substance_code).first()
    if substance is None:
        raise _invalid("substance", "unknown_substance", "There is no such substance.")
    if order.ends_on < order.starts_on:
        raise _invalid("ends_on", "before_start", "The period ends before it starts.")
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        quota, made = Quota.objects.select_for_update(no_key=True, of=("self",)).get_or_create(
            project=project, substance=substance, starts_on=order.starts_on,
            ends_on=order.ends_on,
            defaults={
                "measured_by": order.measured_by, "amount": order.amount,
                "actor_code": actor.code, "reason": order.reason, "created_at": clock.now(),
            },
        )  # fmt: skip
        before = None if made else in_words(quota.measured_by, quota.amount)
        if not made:
            quota.measured_by, quota.amount = order.measured_by, order.amount
            quota.actor_code, quota.reason = actor.code, order.reason
            quota.version += 1
            quota.save()
        record_event(
            actor_code=actor.code, kind="quota.set",
            subject=f"quota {project.code} {substance.code}"[:80],
            before=before, after=in_words(quota.measured_by, quota.amount),
        )  # fmt: skip
        claim.remember(quota)
    return quota


def check_quotas(*, project_id: int, claims: Iterable[tuple[int, int]]) -> None:
    """Raise QuotaExceeded when a claim of today, (bottle id, amount), goes over a quota.

    The quotas stay locked until the caller's transaction ends, so that two claims at once are
    counted one after the other.
    """
    locks.require_transaction()
    amounts = list(claims)
    bottles = Bottle.objects.select_related("form__substance").in_bulk({pk for pk, _ in amounts})
    by_substance: dict[int, list[Claim]] = defaultdict(list)
    for pk, amount in amounts:
        by_substance[bottles[pk].form.substance_id].append((bottles[pk], amount))
    today = clock.today()
    quotas = Quota.objects.filter(
        project=project_id, substance__in=by_substance, starts_on__lte=today, ends_on__gte=today
    )
    locked = quotas.select_for_update(no_key=True, of=("self",)).select_related("substance")
    errors = [
        problem
        for quota in locked.order_by("pk")
        if (problem := _problem(quota, by_substance[quota.substance_id])) is not None
    ]
    if errors:
        raise QuotaExceeded(" ".join(e.detail for e in errors), errors=tuple(errors))


def claimed_of(quota: Quota) -> int:
    """What the project has claimed in the period so far, in the quota's base unit."""
    return _total(quota, _claims_so_far(quota))


def _problem(quota: Quota, claims: list[Claim]) -> FieldProblem | None:
    left = quota.amount - claimed_of(quota)
    wanted = _total(quota, claims)
    if wanted <= left:
        return None
    detail = (
        f"{quota.substance.name}: {in_words(quota.measured_by, max(left, 0))} of "
        f"{in_words(quota.measured_by, quota.amount)} are left for the project until "
        f"{quota.ends_on.isoformat()}, {in_words(quota.measured_by, wanted)} are asked for."
    )
    return FieldProblem(quota.substance.code, "quota_exceeded", detail)


def _total(quota: Quota, claims: Iterable[Claim]) -> int:
    total = 0
    for bottle, amount in claims:
        found = converted(bottle, amount, given_by=bottle.measured_by, wanted_by=quota.measured_by)
        if found is None:
            detail = (
                f"{bottle.code} is measured by {bottle.measured_by} and the quota for "
                f"{quota.substance.name} by {quota.measured_by}; give the bottle a density."
            )
            raise QuotaExceeded(
                detail, errors=(FieldProblem(quota.substance.code, "not_comparable", detail),)
            )
        total += found
    return total


def _claims_so_far(quota: Quota) -> list[Claim]:
    """What was set aside in the period and not given back, and what was used beyond it."""
    start, end = _instant(quota.starts_on), _instant(quota.ends_on + timedelta(days=1))
    holds = Hold.objects.filter(
        reservation__project=quota.project_id, bottle__form__substance=quota.substance_id,
        reservation__created_at__gte=start, reservation__created_at__lt=end,
    )  # fmt: skip
    taken = Movement.objects.filter(
        project=quota.project_id, bottle__form__substance=quota.substance_id,
        booked_on__range=(quota.starts_on, quota.ends_on), kind__in=["use", "return"],
    )  # fmt: skip
    amounts: dict[int, int] = defaultdict(int)
    for bottle_id, amount in _sums(holds, F("amount") - F("given_back")):
        amounts[bottle_id] += amount
    for bottle_id, amount in _sums(taken, F("held_change") - F("on_hand_change")):
        amounts[bottle_id] += amount
    bottles = Bottle.objects.select_related("form__substance").in_bulk(amounts)
    return [(bottles[bottle_id], amount) for bottle_id, amount in amounts.items()]


def _sums(rows: QuerySet, expression: object) -> list[tuple[int, int]]:
    # SUM is an int on one database and a Decimal on the other.
    found = rows.order_by().values_list("bottle").annotate(total=Sum(expression))
    return [(bottle_id, int(total)) for bottle_id, total in found]


def _instant(day: date) -> datetime:
    return datetime.combine(day, time(0), tzinfo=ZoneInfo(settings.LAB_TIME_ZONE))


def _invalid(field: str, code: str, detail: str) -> InvalidValue:
    return InvalidValue(detail, errors=(FieldProblem(field, code, detail),))
