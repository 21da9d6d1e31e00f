"""Hold the outbox, so that nothing is sent until a person has looked: after a restore, say."""

from django.db import transaction

from labplan.base import broker, clock
from labplan.base.models import OutboxPause


def pause(reason: str) -> None:
    """Send nothing any more; a repeat only changes the reason."""
    OutboxPause.objects.update_or_create(pk=1, defaults={"since": clock.now(), "reason": reason})


def resume() -> bool:
    """Send again; False when it was not paused."""
    with transaction.atomic(durable=True):
        found, _ = OutboxPause.objects.all().delete()
        transaction.on_commit(broker.nudge, robust=True)
    return found > 0


def is_paused() -> bool:
    return OutboxPause.objects.exists()


def find_pause() -> OutboxPause | None:
    return OutboxPause.objects.first()
