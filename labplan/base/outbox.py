"""Work that outlives the request: written with it, delivered at least once.

A message goes new -> sent (with a lease) -> done; `done` is set in the handler's own
transaction. What was sent and is not done when its lease ends is delivered again.
"""

import json
import logging
from collections.abc import Callable
from datetime import timedelta
from typing import Any

from django.db import connection, transaction
from django.db.models import Q

from labplan.base import clock
from labplan.base.models import OutboxMessage

logger = logging.getLogger(__name__)
Handler = Callable[[dict[str, Any], int], None]
_handlers: dict[str, Handler] = {}

LEASE = timedelta(minutes=2)
MAX_ATTEMPTS = 8
LONGEST_BACK_OFF_S = 3600


def handles(topic: str) -> Callable[[Handler], Handler]:
    """Register `handler(payload, message_id)` for a topic."""

    def register(handler: Handler) -> Handler:
        _handlers[topic] = handler
        return handler

    return register


def enqueue(topic: str, payload: dict[str, Any]) -> int:
    """Write a message in the caller's transaction and return its id."""
    instant = clock.now()
    message = OutboxMessage.objects.create(
        topic=topic, payload=json.dumps(payload), created_at=instant, available_at=instant
    )
    return message.pk


def mark_done(message_id: int) -> None:
    """Close a message in the handler's own transaction."""
    OutboxMessage.objects.filter(pk=message_id).update(
        state=OutboxMessage.State.DONE, done_at=clock.now(), lease_until=None, last_error=""
    )


def deliver_waiting(*, limit: int = 20) -> int:
    """Claim what is due and run it here, one after the other; return how many were run.

    This is the inline way (the demo, the unit tests): after commit, payload through JSON,
    each handler in its own transaction on this thread's connection.
    """
    if not _due().exists():
        return 0
    messages = _claim(limit)
    for message in messages:
        _run(message)
    return len(messages)


def _due() -> Any:
    instant = clock.now()
    return OutboxMessage.objects.filter(
        Q(state=OutboxMessage.State.NEW, available_at__lte=instant)
        | Q(state=OutboxMessage.State.SENT, lease_until__lte=instant)
    ).order_by("available_at", "id")


def _claim(limit: int) -> list[OutboxMessage]:
    """Take a lease on due messages; two relays never take the same one."""
    with transaction.atomic(durable=True):
        skip = connection.features.has_select_for_update_skip_locked
        due = list(_due().select_for_update(skip_locked=skip)[:limit])
        rows = [row for row in due if not _is_given_up(row)]
        for row in rows:
            row.state = OutboxMessage.State.SENT
            row.attempts += 1
            row.lease_until = clock.now() + LEASE
            row.save(update_fields=["state", "attempts", "lease_until"])
    return rows


def _is_given_up(row: OutboxMessage) -> bool:
    """Close a message whose every run ended without a word: it takes its process with it."""
    if row.state != OutboxMessage.State.SENT or row.attempts < MAX_ATTEMPTS:
        return False
    row.state, row.lease_until = OutboxMessage.State.DEAD, None
    row.last_error = f"broke off {row.attempts} times without an error"
    row.save(update_fields=["state", "lease_until", "last_error"])
    logger.error("message %s (%s) is given up: %s", row.pk, row.topic, row.last_error)
    return True


def _run(message: OutboxMessage) -> None:
    handler = _handlers.get(message.topic)
    try:
        if handler is None:
            raise LookupError(f"no handler for the topic {message.topic!r}")
        handler(json.loads(message.payload), message.pk)
    except Exception as error:
        # Whatever broke, the row must say so and be tried again: the relay itself goes on.
        logger.exception("message %s (%s) failed", message.pk, message.topic)
        _put_back(message, error)


def _put_back(message: OutboxMessage, error: Exception) -> None:
    dead = message.attempts >= MAX_ATTEMPTS
    wait_s = min(2**message.attempts, LONGEST_BACK_OFF_S)
    # By its attempt: a run that outlived its lease must not touch the one that followed it.
    OutboxMessage.objects.filter(
        pk=message.pk, state=OutboxMessage.State.SENT, attempts=message.attempts
    ).update(
        state=OutboxMessage.State.DEAD if dead else OutboxMessage.State.NEW,
        available_at=clock.now() + timedelta(seconds=wait_s),
        lease_until=None,
        last_error=f"{type(error).__name__}: {error}"[:2000],
    )
