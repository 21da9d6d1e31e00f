"""Tell people and the other apps what a fact has done to their holds."""

import uuid
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from django.db import transaction

from inventory.models import Hold, Notice
from inventory.quantities import in_words
from labplan.base import clock, outbox
from labplan.base.errors import NotFound
from labplan.base.idempotency import Once, Unclaimed
from labplan.base.rights import Actor, require

HOLDS_CANCELLED_TOPIC = "stock.holds_cancelled"


@dataclass(frozen=True)
class CancelledHold:
    """A hold that a fact has overtaken; `amount` is what it still held."""

    hold_id: int
    reservation_code: uuid.UUID
    person_code: str
    project_id: int
    purpose: str
    line: int
    bottle_code: str
    why: str
    amount_text: str
    message: dict[str, Any]

    @classmethod
    def of(cls, hold: Hold, amount: int, why: str) -> "CancelledHold":
        reservation = hold.reservation
        return cls(
            hold.pk, reservation.code, reservation.actor_code, reservation.project_id,
            reservation.purpose, hold.line, hold.bottle.code, why,
            in_words(hold.bottle.measured_by, amount), lost_hold(hold, amount, why),
        )  # fmt: skip


def tell_who_is_hit(cancelled: Sequence[CancelledHold]) -> None:
    """A notice for each hold and a message for each reservation, in the caller's transaction."""
    if not cancelled:
        return
    created_at = clock.now()
    Notice.objects.bulk_create(
        Notice(
            person_code=hold.person_code, project_id=hold.project_id,
            kind=Notice.Kind.HOLD_CANCELLED, bottle_code=hold.bottle_code,
            reservation_code=hold.reservation_code, line=hold.line, detail=_detail(hold),
            created_at=created_at,
        )
        for hold in cancelled
    )  # fmt: skip
    by_reservation: dict[uuid.UUID, list[dict[str, Any]]] = defaultdict(list)
    for hold in cancelled:
        by_reservation[hold.reservation_code].append(hold.message)
    for code, holds in by_reservation.items():
        tell_the_app(code, holds)


def tell_the_app(reservation_code: uuid.UUID, holds: list[dict[str, Any]]) -> None:
    """Leave a message for whichever app made the reservation, in the caller's transaction."""
    outbox.enqueue(HOLDS_CANCELLED_TOPIC, {"reservation": str(reservation_code), "holds": holds})


def lost_hold(hold: Hold, amount: int, why: str) -> dict[str, Any]:
    """One hold that is gone, as a message says it."""
    return {
        "line": hold.line, "bottle": hold.bottle.code,
        "amount": in_words(hold.bottle.measured_by, amount), "why": why,
    }  # fmt: skip


def mark_notice_read(*, actor: Actor, notice_id: int, once: Once | None = None) -> Notice:
    """Say that a notice of one's own has been read; safe to repeat. Raises NotFound."""
    notice = require_own_notice(actor=actor, notice_id=notice_id)
    claim = once or Unclaimed()
    with transaction.atomic(durable=True):
        claim.insert()
        Notice.objects.filter(pk=notice.pk, read_at__isnull=True).update(read_at=clock.now())
        notice.refresh_from_db()
        claim.remember(notice)
    return notice


def require_own_notice(*, actor: Actor, notice_id: int) -> Notice:
    """The notice, if it is the actor's. Raises NotFound and NotAllowed."""
    found = Notice.objects.filter(pk=notice_id, person_code=actor.code).select_related("project")
    notice = found.first()
    if notice is None:
        raise NotFound(f"There is no notice {notice_id}.")
    require(actor, "notice.mark")
    return notice


def _detail(hold: CancelledHold) -> str:
    return (
        f"{hold.amount_text} of bottle {hold.bottle_code}, set aside for {hold.purpose}, cannot "
        f"be kept: {hold.why}. Set another bottle aside or release the rest."
    )[:400]
