"""Ask the web service."""

import asyncio
import logging
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass

import aiohttp
from multidict import CIMultiDict
from yarl import URL

from labplan.operations.waiting.errors import ClientSlow, WebAway, WebBrokeOff, WebSilent

logger = logging.getLogger(__name__)
CONNECT_S = 10.0
SILENT_S = 120.0  # more than any worker is given
READ_AHEAD_BYTES = 1024 * 1024  # so that a slow client frees the worker before it has read all
_ADDED_BY_THE_CLIENT = ("Accept", "Accept-Encoding", "Content-Type", "User-Agent")


@dataclass(frozen=True)
class Question:
    """A request on its way to the web service."""

    method: str
    target: str
    headers: CIMultiDict[str]
    body: bytes | AsyncIterator[bytes] | None = None


class WebService:
    """The web service behind a Unix socket or an http address."""

    def __init__(self, address: str) -> None:
        """`unix:/path` or `http://host:port`; needs a running event loop."""
        path = address.removeprefix("unix:")
        is_unix = path != address
        # A new connection each time: one that is kept may be closed just as it is used again,
        # and a POST must not be sent twice by guess.
        self._session = aiohttp.ClientSession(
            connector=(
                aiohttp.UnixConnector(path, force_close=True) if is_unix
                else aiohttp.TCPConnector(force_close=True)
            ),
            timeout=aiohttp.ClientTimeout(connect=CONNECT_S, sock_read=SILENT_S),
            cookie_jar=aiohttp.DummyCookieJar(),
            skip_auto_headers=_ADDED_BY_THE_CLIENT,
            auto_decompress=False,
            read_bufsize=READ_AHEAD_BYTES,
        )  # fmt: skip
        # The host is only for requests that name none.
        self._base = "http://localhost" if is_unix else address.rstrip("/")

    async def close(self) -> None:
        await self._session.close()

    @asynccontextmanager
    async def ask(self, question: Question) -> AsyncIterator[aiohttp.ClientResponse]:
        """The answer, its body yet to be read. Raises WebAway, WebBrokeOff or WebSilent."""
        try:
            answer = await self._session.request(
                question.method, URL(self._base + question.target, encoded=True),
                headers=question.headers, data=question.body, allow_redirects=False,
            )  # fmt: skip
        except (aiohttp.ClientError, TimeoutError) as error:
            raise refusal_for(error) from error
        async with answer:
            yield answer


def refusal_for(error: Exception) -> WebAway | WebBrokeOff | WebSilent | ClientSlow:
    if isinstance(error.__cause__, ClientSlow):
        return error.__cause__
    logger.warning("web service: %s: %s", type(error).__name__, error)
    if isinstance(error, aiohttp.ClientConnectorError | aiohttp.ConnectionTimeoutError):
        return WebAway("It may be starting. Send the request again in a moment.")
    if isinstance(error, TimeoutError):
        return WebSilent(
            "It may be doing the work still. Send the same request again, with the same "
            "Idempotency-Key, and nothing is done twice."
        )
    return WebBrokeOff(
        "Send the same request again, with the same Idempotency-Key, and nothing is done twice."
    )


async def let_answers_in() -> None:
    """Let the loop read from the web service before more is written to it.

    It may have refused the body and hung up; writing then would lose the refusal. Twice, because
    what is readable is found in one round of the loop and read in the next.
    """
    await asyncio.sleep(0)
    await asyncio.sleep(0)
