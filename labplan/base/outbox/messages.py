"""The life of a message: new -> sent (with a lease) -> done, or dead.

Every change of state but `done` is here; `done` is set in the handler's own transaction. A claim
numbers the message (`sends`): only the newest number may be run, so that an older copy in the
broker does nothing. `attempts` counts the runs that were begun, and is committed before each.
"""

import json
import logging
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

from django.conf import settings
from django.db import connection, transaction
from django.db.models import Count, Exists, Q, QuerySet

from labplan.base import broker, clock, tracing
from labplan.base.models import OutboxMessage, OutboxPause
from labplan.base.outbox.topics import DEFAULT_LIMIT_S, QUEUES, find_topic, queue_of

logger = logging.getLogger(__name__)

MAX_ATTEMPTS = 8
LONGEST_BACK_OFF_S = 3600
# What a run may still do after its time limit: be killed, and be noticed.
GRACE_S = 3
State = OutboxMessage.State


@dataclass(frozen=True)
class Run:
    """One begun run of a message; what it may still change is found by its two numbers."""

    message_id: int
    topic: str
    payload: dict[str, Any]
    request_id: str
    send: int
    attempt: int


def lease() -> timedelta:
    """How long a message may lie in the broker before it is sent again."""
    return timedelta(seconds=settings.OUTBOX_LEASE_S)


def enqueue(topic: str, payload: dict[str, Any]) -> int:
    """Write a message in the caller's transaction and return its id."""
    instant = clock.now()
    message = OutboxMessage.objects.create(
        topic=topic, queue=queue_of(topic), payload=json.dumps(payload),
        request_id=tracing.current(), created_at=instant, available_at=instant,
    )  # fmt: skip
    transaction.on_commit(broker.nudge, robust=True)
    return message.pk


def mark_done(message_id: int) -> None:
    """Close a message in the handler's own transaction."""
    OutboxMessage.objects.filter(pk=message_id).update(
        state=State.DONE, done_at=clock.now(), lease_until=None, last_error=""
    )


def due() -> QuerySet[OutboxMessage]:
    """What is to be sent: new and its time has come, or sent and its lease has ended.

    Nothing while the outbox is paused.
    """
    instant = clock.now()
    return OutboxMessage.objects.filter(
        Q(state=State.NEW, available_at__lte=instant)
        | Q(state=State.SENT, lease_until__lte=instant),
        ~Exists(OutboxPause.objects.all()),
    ).order_by("available_at", "id")


def claim(*, limit: int, in_flight: int | None = None) -> list[OutboxMessage]:
    """Take a lease on due messages; two relays never take the same one.

    With `in_flight`, no queue gets more than that many messages that are sent and not done.
    """
    with transaction.atomic(durable=True):
        rows = [row for row in _locked_due(limit, in_flight) if not _give_up_if_worn_out(row)]
        for row in rows:
            row.state, row.sends = State.SENT, row.sends + 1
            row.lease_until = clock.now() + lease()
            row.save(update_fields=["state", "sends", "lease_until"])
    return rows


def _locked_due(limit: int, in_flight: int | None) -> list[OutboxMessage]:
    skip = connection.features.has_select_for_update_skip_locked
    waiting = due().select_for_update(skip_locked=skip)
    if in_flight is None:
        return list(waiting[:limit])
    on_the_way = OutboxMessage.objects.filter(state=State.SENT, lease_until__gt=clock.now())
    counted = dict(on_the_way.values_list("queue").annotate(number=Count("id")).order_by())
    rows: list[OutboxMessage] = []
    for queue in QUEUES:
        room = min(limit, in_flight - counted.get(queue, 0))
        if room > 0:
            rows += waiting.filter(queue=queue)[:room]
    return rows


def hand_back(rows: list[OutboxMessage]) -> None:
    """Undo a claim that could not be published: the broker is away, no message is at fault."""
    for row in rows:
        _of_send(row.pk, row.sends).update(state=State.NEW, lease_until=None)


def recall_sent() -> int:
    """Make everything that is sent new again, after a restore; return how many were.

    Whoever was at work on it worked on another database.
    """
    return OutboxMessage.objects.filter(state=State.SENT).update(state=State.NEW, lease_until=None)


def begin_run(message_id: int, send: int) -> Run | None:
    """Count and commit a run; None when the message is done, or was sent again since."""
    with transaction.atomic(durable=True):
        row = _of_send(message_id, send).select_for_update(no_key=True).first()
        if row is None or _give_up_if_worn_out(row):
            return None
        row.attempts += 1
        row.lease_until = clock.now() + timedelta(seconds=limit_s(row.topic) + GRACE_S)
        row.save(update_fields=["attempts", "lease_until"])
    return Run(row.pk, row.topic, json.loads(row.payload), row.request_id, row.sends, row.attempts)


def limit_s(topic: str) -> int:
    """When a run of this topic is killed [s]."""
    found = find_topic(topic)
    return found.limit_s if found else DEFAULT_LIMIT_S


def put_back(run: Run, error: Exception) -> None:
    """Let a failed run be tried again later, twice as late each time; at last give it up.

    A run that outlived its lease must not touch the one that followed it: nothing happens then.
    """
    with transaction.atomic(durable=True):
        row = (
            _of_send(run.message_id, run.send)
            .select_for_update(no_key=True)
            .filter(attempts=run.attempt)
            .first()
        )
        if row is None:
            return
        row.last_error = f"{type(error).__name__}: {error}"[:2000]
        if row.attempts >= MAX_ATTEMPTS:
            _give_up(row)
            return
        wait_s = min(2**row.attempts, LONGEST_BACK_OFF_S)
        row.state, row.lease_until = State.NEW, None
        row.available_at = clock.now() + timedelta(seconds=wait_s)
        row.save(update_fields=["state", "lease_until", "available_at", "last_error"])


def _of_send(message_id: int, send: int) -> QuerySet[OutboxMessage]:
    return OutboxMessage.objects.filter(pk=message_id, state=State.SENT, sends=send)


def _give_up_if_worn_out(row: OutboxMessage) -> bool:
    """Close a message whose every run ended without a word: it takes its process with it."""
    if row.state != State.SENT or row.attempts < MAX_ATTEMPTS:
        return False
    row.last_error = f"broke off {row.attempts} times without an error"
    _give_up(row)
    return True


def _give_up(row: OutboxMessage) -> None:
    """Close a message for good; if what must follow fails, it is tried when a new lease ends."""
    topic = find_topic(row.topic)
    try:
        with transaction.atomic():
            if topic and topic.when_given_up:
                topic.when_given_up(json.loads(row.payload), row.last_error)
            row.state, row.lease_until = State.DEAD, None
            row.save(update_fields=["state", "lease_until", "last_error"])
    except Exception:
        # One message must not stop the relay, nor be lost.
        logger.exception("message %s (%s) cannot be given up yet", row.pk, row.topic)
        row.state, row.lease_until = State.SENT, clock.now() + lease()
        row.save(update_fields=["state", "lease_until", "last_error"])
        return
    logger.error("message %s (%s) is given up: %s", row.pk, row.topic, row.last_error)


def list_dead() -> QuerySet[OutboxMessage]:
    """The dead letters, oldest first."""
    return OutboxMessage.objects.filter(state=State.DEAD).order_by("id")


def send_again(message_id: int) -> bool:
    """Give a dead letter a fresh start; False when there is no such dead letter."""
    with transaction.atomic(durable=True):
        row = list_dead().select_for_update(no_key=True).filter(pk=message_id).first()
        if row is None:
            return False
        topic = find_topic(row.topic)
        if topic and topic.when_sent_again:
            topic.when_sent_again(json.loads(row.payload))
        row.state, row.attempts, row.available_at = State.NEW, 0, clock.now()
        row.save(update_fields=["state", "attempts", "available_at"])
        transaction.on_commit(broker.nudge, robust=True)
    return True
