"""Work that outlives the request: written with it, delivered at least once.

A message goes new -> sent (with a lease) -> done; `done` is set in the handler's own
transaction. What was sent and is not done when its lease ends is delivered again.
"""

from labplan.base.outbox.delivery import (
    IN_FLIGHT,
    deliver_waiting,
    publish_waiting,
    run_message,
)
from labplan.base.outbox.figures import OutboxFigures, outbox_figures
from labplan.base.outbox.messages import (
    GRACE_S,
    LONGEST_BACK_OFF_S,
    MAX_ATTEMPTS,
    enqueue,
    lease,
    limit_s,
    list_dead,
    mark_done,
    recall_sent,
    send_again,
)
from labplan.base.outbox.switch import find_pause, is_paused, pause, resume
from labplan.base.outbox.topics import (
    CAMPAIGNS,
    DOCUMENTS,
    HOUSEKEEPING,
    PROCEDURES,
    QUEUES,
    Handler,
    handles,
)

__all__ = [
    "CAMPAIGNS",
    "DOCUMENTS",
    "GRACE_S",
    "HOUSEKEEPING",
    "IN_FLIGHT",
    "LONGEST_BACK_OFF_S",
    "MAX_ATTEMPTS",
    "PROCEDURES",
    "QUEUES",
    "Handler",
    "OutboxFigures",
    "deliver_waiting",
    "enqueue",
    "find_pause",
    "handles",
    "is_paused",
    "lease",
    "limit_s",
    "list_dead",
    "mark_done",
    "outbox_figures",
    "pause",
    "publish_waiting",
    "recall_sent",
    "resume",
    "run_message",
    "send_again",
]
