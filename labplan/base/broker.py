"""Words between processes over the broker: hints that save waiting, never needed for an outcome.

A hint that is lost costs time only: the relay looks by itself, and so does whoever waits.
"""

import logging
import time
from functools import cache

import redis
from django.conf import settings

from labplan.base.channels import NUDGE_CHANNEL, client_address

logger = logging.getLogger(__name__)

# A broker that is away must not slow requests down: short waits, and a rest after a failure.
_PATIENCE_S = 0.25
_REST_S = 1.0
_quiet_until = 0.0


@cache
def client(url: str | None = None, *, patience_s: float | None = _PATIENCE_S) -> redis.Redis:
    """A connection pool to the broker. Raises RuntimeError when none is configured."""
    address = url or settings.BROKER_URL
    if not address:
        raise RuntimeError("No broker: set REDIS_URL, or start everything with `make serve`.")
    return redis.Redis.from_url(
        client_address(address),
        socket_timeout=patience_s, socket_connect_timeout=patience_s, decode_responses=True,
    )  # fmt: skip


def say(channel: str, text: str = "") -> None:
    """Publish a hint; a broker that is away is left alone for a second."""
    global _quiet_until  # noqa: PLW0603 - one broker a process
    if not settings.BROKER_URL or time.monotonic() < _quiet_until:
        return
    try:
        client().publish(channel, text)
    except redis.RedisError as error:
        _quiet_until = time.monotonic() + _REST_S
        logger.warning("the broker does not answer: %s", error)


def nudge() -> None:
    """Tell the relay that there is something new."""
    say(NUDGE_CHANNEL)
