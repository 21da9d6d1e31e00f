"""Hints that a procedure has changed: one subscription for all who wait.

A hint only saves time. Who waits looks again by itself as well, so lost hints, a broker that is
away and none at all are the same here.
"""

import asyncio
import logging
from collections import defaultdict
from collections.abc import AsyncIterator, Iterator
from contextlib import contextmanager

from redis.asyncio import Redis
from redis.asyncio.retry import Retry
from redis.backoff import NoBackoff

from labplan.base.channels import CHANGED_CHANNEL, client_address

logger = logging.getLogger(__name__)
FIRST_REST_S = 0.1
LONGEST_REST_S = 2.0
LISTEN_S = 5.0  # then the connection is looked after


class Hints:
    """Who waits for which procedure."""

    def __init__(self) -> None:
        self._bells: defaultdict[str, set[asyncio.Event]] = defaultdict(set)
        self.are_coming = False  # as far as is known

    @contextmanager
    def listening(self, code: str) -> Iterator[asyncio.Event]:
        """A bell that rings (is set) when the procedure has changed; begin before you ask."""
        bell = asyncio.Event()
        self._bells[code].add(bell)
        try:
            yield bell
        finally:
            self._bells[code].discard(bell)
            if not self._bells[code]:
                del self._bells[code]

    def ring(self, code: str) -> None:
        for bell in self._bells.get(code, ()):
            bell.set()

    def ring_all(self) -> None:
        for code in self._bells:
            self.ring(code)

    def __len__(self) -> int:
        return sum(map(len, self._bells.values()))


async def follow_broker(address: str, hints: Hints) -> None:
    """Ring for every hint until cancelled; a broker that is away is tried again and again."""
    rest_s = FIRST_REST_S
    while True:
        try:
            async for code in _codes(address):
                rest_s = FIRST_REST_S
                if code is None:
                    logger.info("listening to the hints of the broker")
                    hints.are_coming = True
                    hints.ring_all()  # what changed while it was away
                else:
                    hints.ring(code)
        except Exception as error:  # whatever the broker does, this service goes on
            logger.warning("no hints from the broker: %s", error)
        hints.are_coming = False
        await asyncio.sleep(rest_s)
        rest_s = min(2 * rest_s, LONGEST_REST_S)


async def _codes(address: str) -> AsyncIterator[str | None]:
    """None once subscribed, then the code of each procedure that changes."""
    once = Retry(NoBackoff(), 0)
    async with (
        Redis.from_url(client_address(address), retry=once, health_check_interval=5) as broker,
        broker.pubsub() as ear,
    ):
        await ear.subscribe(CHANGED_CHANNEL)
        while True:
            message = await ear.get_message(timeout=LISTEN_S)
            if message is not None:
                is_hint = message["type"] == "message"
                yield message["data"].decode(errors="replace") if is_hint else None
