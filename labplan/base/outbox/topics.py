"""What kinds of work there are, who does them and in which queue."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

PROCEDURES, CAMPAIGNS, DOCUMENTS, HOUSEKEEPING = (
    "procedures", "campaigns", "documents", "housekeeping",
)  # fmt: skip
QUEUES = (PROCEDURES, CAMPAIGNS, DOCUMENTS, HOUSEKEEPING)
DEFAULT_LIMIT_S = 60

Payload = dict[str, Any]
Handler = Callable[[Payload, int], None]
AfterGivingUp = Callable[[Payload, str], None]


@dataclass(frozen=True)
class Topic:
    """A kind of work.

    `limit_s` is when a run is killed. `when_given_up(payload, reason)` and
    `when_sent_again(payload)` run in the transaction that closes or reopens a message.
    """

    handler: Handler
    queue: str
    limit_s: int
    when_given_up: AfterGivingUp | None = None
    when_sent_again: Callable[[Payload], None] | None = None


_topics: dict[str, Topic] = {}


def handles(
    name: str, *, queue: str, limit_s: int = DEFAULT_LIMIT_S,
    when_given_up: AfterGivingUp | None = None,
    when_sent_again: Callable[[Payload], None] | None = None,
) -> Callable[[Handler], Handler]:  # fmt: skip
    """Register `handler(payload, message_id)` for a topic; it must be safe to repeat."""
    if queue not in QUEUES:
        raise ValueError(f"no queue {queue!r}")

    def register(handler: Handler) -> Handler:
        _topics[name] = Topic(handler, queue, limit_s, when_given_up, when_sent_again)
        return handler

    return register


def find_topic(name: str) -> Topic | None:
    return _topics.get(name)


def queue_of(name: str) -> str:
    """The queue of a topic; work that nobody here knows goes to housekeeping, to be noticed."""
    topic = find_topic(name)
    return topic.queue if topic else HOUSEKEEPING
