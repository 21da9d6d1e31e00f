"""What the outbox looks like from outside: for metrics, health and the operator."""

from dataclasses import dataclass

from django.db.models import Count, Min

from labplan.base import clock
from labplan.base.models import OutboxMessage
from labplan.base.outbox.switch import is_paused

UNFINISHED = (OutboxMessage.State.NEW, OutboxMessage.State.SENT)


@dataclass(frozen=True)
class OutboxFigures:
    """Messages by (queue, state) as far as they are not done, and the age of the oldest [s]."""

    waiting: dict[tuple[str, str], int]
    oldest_age_s: float
    is_paused: bool

    def count(self, state: str) -> int:
        return sum(number for (_, found), number in self.waiting.items() if found == state)


def outbox_figures() -> OutboxFigures:
    open_ones = OutboxMessage.objects.exclude(state=OutboxMessage.State.DONE)
    counted = open_ones.values_list("queue", "state").annotate(n=Count("id")).order_by()
    oldest = open_ones.filter(state__in=UNFINISHED).aggregate(at=Min("created_at"))["at"]
    age_s = (clock.now() - oldest).total_seconds() if oldest else 0.0
    return OutboxFigures(
        {(queue, state): number for queue, state, number in counted},
        max(0.0, age_s),
        is_paused(),
    )
