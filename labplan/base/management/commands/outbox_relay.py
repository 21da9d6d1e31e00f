"""Hand what waits in the outbox to the workers."""

import logging
import time
from typing import Any

import redis
from django.core.management.base import CommandError, CommandParser
from django.db import DatabaseError, close_old_connections
from kombu.exceptions import OperationalError as BrokerError

from labplan.base import broker, outbox
from labplan.base.channels import NUDGE_CHANNEL
from labplan.base.commands import LabCommand
from labplan.base.tasks import send_to_workers

logger = logging.getLogger(__name__)
LOOK_EVERY_S = 1.0  # without a nudge
BACKLOG_PAUSE_S = 0.1  # after something was sent: there may be more than could go out
LONGEST_REST_S = 5.0  # while the broker or the database is away


class Command(LabCommand):
    help = "Hand the work that waits in the outbox to the workers, until stopped."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--once", action="store_true", help="stop when nothing is due")

    def handle(self, *args: Any, **options: Any) -> None:
        try:
            broker.client()
        except RuntimeError as error:
            raise CommandError(str(error)) from error
        import labplan.celery  # noqa: F401 - the tasks need the app with its broker

        if options["once"]:
            while outbox.publish_waiting(send_to_workers):
                pass
            return
        logger.info("relay: handing work from the outbox to the workers")
        _Relay().run_for_ever()


class _Relay:
    """Look, publish, sleep until nudged; a broker or database that is away is waited for."""

    def __init__(self) -> None:
        self._ear = broker.client(patience_s=None).pubsub(ignore_subscribe_messages=True)
        self._rest_s = 0.0

    def run_for_ever(self) -> None:
        while True:
            try:
                close_old_connections()
                sent = outbox.publish_waiting(send_to_workers)
                self._rest_s = 0.0
                self._wait(BACKLOG_PAUSE_S if sent else LOOK_EVERY_S)
            except (redis.RedisError, BrokerError, DatabaseError, OSError) as error:
                self._rest_s = min(LONGEST_REST_S, 2 * self._rest_s or 0.1)
                logger.warning("relay rests %.1f s: %s", self._rest_s, error)
                time.sleep(self._rest_s)

    def _wait(self, seconds: float) -> None:
        """Until a nudge or the time is up; all nudges that have come by then count as one."""
        if not self._ear.subscribed:
            self._ear.subscribe(NUDGE_CHANNEL)
        if self._ear.get_message(timeout=seconds) is not None:
            while self._ear.get_message(timeout=0) is not None:
                pass
