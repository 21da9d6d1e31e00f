"""What `base` does every so often: seal what is new, forget old answers, clear old messages."""

from datetime import timedelta

from django.db.models import QuerySet

from labplan.base import clock
from labplan.base.housekeeping import sweeps
from labplan.base.models import OutboxMessage, RememberedAnswer
from labplan.base.seal import seal_new

# How long the same Idempotency-Key brings the same answer.
ANSWERS_KEPT = timedelta(days=7)
MESSAGES_KEPT = timedelta(days=30)
# Rows a transaction: a sweep must not keep others from writing.
CHUNK = 500


@sweeps("base.forget_answers", every=timedelta(hours=1))
def forget_answers() -> int:
    """Delete remembered answers after seven days; returns how many."""
    return _delete(RememberedAnswer.objects.filter(created_at__lt=clock.now() - ANSWERS_KEPT))


@sweeps("base.clear_messages", every=timedelta(hours=1))
def clear_messages() -> int:
    """Delete messages that have been done for thirty days; dead letters stay."""
    done = OutboxMessage.objects.filter(state=OutboxMessage.State.DONE)
    return _delete(done.filter(done_at__lt=clock.now() - MESSAGES_KEPT))


sweeps("base.seal", every=timedelta(minutes=1))(seal_new)


def _delete(rows: QuerySet) -> int:
    total = 0
    while keys := list(rows.order_by("pk").values_list("pk", flat=True)[:CHUNK]):
        total += rows.filter(pk__in=keys).delete()[0]
    return total
