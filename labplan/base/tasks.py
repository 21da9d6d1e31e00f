"""What Celery runs: two tasks that call services. They carry ids; all state is in the database."""

import logging

from celery import shared_task
from django.db import close_old_connections

from labplan.base import housekeeping, outbox, tracing
from labplan.base.models import OutboxMessage

logger = logging.getLogger(__name__)


@shared_task(name="labplan.run_message")
def run_message(message_id: int, send: int) -> None:
    close_old_connections()
    outbox.run_message(message_id, send)


@shared_task(name="labplan.run_sweep")
def run_sweep(name: str) -> None:
    close_old_connections()
    with tracing.working_on(tracing.new_id()):
        found = housekeeping.run_duty(name)
        if found:
            logger.info("sweep %s: %s", name, found)


def send_to_workers(message: OutboxMessage) -> None:
    """Publish a message that was claimed; raises when the broker does not take it."""
    run_message.apply_async(
        args=[message.pk, message.sends],
        task_id=f"outbox-{message.pk}-{message.sends}",
        queue=message.queue,
        time_limit=outbox.limit_s(message.topic),
        retry=False,
    )
    with tracing.working_on(message.request_id):
        logger.info(
            "message %s (%s) sent to %s", message.pk, message.topic, message.queue,
            extra={"message_id": message.pk, "topic": message.topic, "queue": message.queue,
                   "send": message.sends},
        )  # fmt: skip
