"""Get messages to their handlers: over the broker, or here and now."""

import logging
import time
from collections.abc import Callable

from django.db import close_old_connections

from labplan.base import metrics, tracing
from labplan.base.models import OutboxMessage
from labplan.base.outbox import messages, topics

logger = logging.getLogger(__name__)

# A queue gets this many messages at most that are not done; the others wait in the database, in
# their order, where they can still be cancelled.
IN_FLIGHT = 64
Send = Callable[[OutboxMessage], None]


def publish_waiting(send: Send, *, limit: int = IN_FLIGHT) -> int:
    """Claim what is due and give each message to `send`; return how many went out.

    Raises what `send` raises, after handing back what did not go out: a broker that is away uses
    up none of a message's attempts.
    """
    if not messages.due().exists():
        return 0
    rows = messages.claim(limit=limit, in_flight=IN_FLIGHT)
    for number, row in enumerate(rows):
        try:
            send(row)
        except Exception:
            messages.hand_back(rows[number:])
            raise
    return len(rows)


def deliver_waiting(*, limit: int = 20) -> int:
    """Claim what is due and run it here, one after the other; return how many were run.

    This is the inline way (the demo, the unit tests): after commit, payload through JSON,
    each handler in its own transaction on this thread's connection.
    """
    if not messages.due().exists():
        return 0
    rows = messages.claim(limit=limit)
    for row in rows:
        run_message(row.pk, row.sends)
    return len(rows)


def run_message(message_id: int, send: int) -> str:
    """Run the handler of a message; return how it ended: done, failed or left (nothing to do).

    A repeat is safe: what is done, or was sent again since, is left alone.
    """
    run = messages.begin_run(message_id, send)
    if run is None:
        return "left"
    with tracing.working_on(run.request_id):
        started = time.monotonic()
        fields = {"message_id": run.message_id, "topic": run.topic, "attempt": run.attempt}
        logger.info("run begun: message %s (%s)", run.message_id, run.topic, extra=fields)
        outcome = _run_handler(run)
        duration_s = time.monotonic() - started
        known = run.topic if topics.find_topic(run.topic) else "unknown"
        metrics.count_run(known, outcome, duration_s)
        fields |= {"outcome": outcome, "duration_ms": round(duration_s * 1000, 1)}
        logger.info(
            "run ended: message %s (%s) is %s after %.0f ms",
            run.message_id, run.topic, outcome, duration_s * 1000, extra=fields,
        )  # fmt: skip
    return outcome


def _run_handler(run: messages.Run) -> str:
    try:
        topic = topics.find_topic(run.topic)
        if topic is None:
            raise LookupError(f"no handler for the topic {run.topic!r}")
        topic.handler(run.payload, run.message_id)
    except Exception as error:
        # Whatever broke, the row must say so and be tried again: the worker itself goes on.
        logger.exception("message %s (%s) failed", run.message_id, run.topic)
        close_old_connections()  # it may have been the connection that broke
        messages.put_back(run, error)
        return "failed"
    return "done"
