"""Listen, bound what a client may take, end in order."""

import asyncio
import json
import logging
import os
import signal
from contextlib import suppress
from dataclasses import dataclass
from typing import Any

from aiohttp import web
from aiohttp.http_exceptions import BadHttpMethod, HttpProcessingError

from labplan.base.errors import DomainError, MalformedRequest
from labplan.base.problem_form import CONTENT_TYPE, problem_body
from labplan.operations.waiting.errors import BrokenHere, MethodUnknown, WebAway
from labplan.operations.waiting.front import MOST_WAITING, FrontDoor
from labplan.operations.waiting.hints import Hints, follow_broker
from labplan.operations.waiting.passing import problem
from labplan.operations.waiting.upstream import WebService

logger = logging.getLogger(__name__)
MOST_CONNECTIONS = 800  # under the usual limit of 1,024 open files
ENDING_S = 0.8  # for the answers under way; then their connections are cut
LIMITS: dict[str, Any] = {
    # A connection without a whole head in this time is closed, the first and every later one.
    "keepalive_timeout": 30.0,
    "lingering_time": 5.0,  # how long the rest of a refused body is read
    "max_line_size": 8190,
    "max_field_size": 8190,
    "max_headers": 100,
    "auto_decompress": False,
    "access_log": None,
}


@dataclass(frozen=True)
class Options:
    """What the command line says."""

    listen: str  # host:port or unix:/path
    web: str  # unix:/path or http://host:port
    broker: str = ""
    most_waiting: int = MOST_WAITING


class _Conversation(web.RequestHandler):
    """One connection; what cannot be read or broke is answered in the form of the house."""

    def handle_error(
        self, request: web.BaseRequest, status: int = 500, exc: BaseException | None = None,
        message: str | None = None,
    ) -> web.StreamResponse:  # fmt: skip
        if request.writer.output_size > 0:
            raise ConnectionResetError("the answer has begun; only hanging up is left") from exc
        if isinstance(exc, BadHttpMethod):
            response = problem(MethodUnknown("Use a registered method of HTTP."))
        elif isinstance(exc, HttpProcessingError):
            response = problem(
                MalformedRequest("The head of the request is no HTTP, or too large.")
            )
        else:
            logger.error("unforeseen error", exc_info=exc)
            response = problem(BrokenHere("Something broke at the front door. Tell the operator."))
        response.force_close()
        return response


class _TurnedAway(asyncio.Protocol):
    """A connection over the limit."""

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        assert isinstance(transport, asyncio.Transport)
        transport.write(_FULL)
        transport.close()


def _bare_answer(error: DomainError) -> bytes:
    body = json.dumps(problem_body(error)).encode()
    head = (
        f"HTTP/1.1 {error.status} Service Unavailable\r\nContent-Type: {CONTENT_TYPE}\r\n"
        f"Content-Length: {len(body)}\r\nRetry-After: 1\r\nConnection: close\r\n\r\n"
    )
    return head.encode() + body


_FULL = _bare_answer(WebAway("Too many connections are open. Send the request again in a moment."))


class _Server(web.Server):
    def __call__(self) -> web.RequestHandler:
        if len(self.connections) >= MOST_CONNECTIONS:
            return _TurnedAway()  # type: ignore[return-value]
        return _Conversation(self, loop=asyncio.get_running_loop(), **LIMITS)


class Service:
    """The service from its first connection to its last."""

    def __init__(self, options: Options) -> None:
        """Needs a running event loop."""
        self._options = options
        self.hints = Hints()
        self._web_service = WebService(options.web)
        self.door = FrontDoor(self._web_service, self.hints, most_waiting=options.most_waiting)
        self._runner = web.ServerRunner(
            _Server(self.door.answer, handler_cancellation=True), shutdown_timeout=ENDING_S
        )
        self._ear: asyncio.Task[None] | None = None

    async def start(self) -> str:
        """Listen; return the address. Raises OSError."""
        await self._runner.setup()
        address = await _listen(self._runner, self._options.listen)
        if self._options.broker:
            self._ear = asyncio.create_task(follow_broker(self._options.broker, self.hints))
        logger.info("waiting service: listening on %s", address)
        return address

    async def end(self) -> None:
        """Give those who wait what is known now, let answers under way end, cut the others."""
        self.door.let_go()
        if self._ear is not None:
            self._ear.cancel()
            await asyncio.wait([self._ear], timeout=0.2)
        await self._runner.cleanup()
        await self._web_service.close()
        if path := _socket_path(self._options.listen):
            with suppress(FileNotFoundError):
                os.unlink(path)
        logger.info("waiting service: ended")


async def _listen(runner: web.ServerRunner, listen: str) -> str:
    if path := _socket_path(listen):
        await web.UnixSite(runner, path, backlog=512).start()
        return listen
    host, _, port = listen.rpartition(":")
    await web.TCPSite(runner, host.strip("[]"), int(port), backlog=512).start()
    bound_host, bound_port = runner.addresses[0][:2]
    return f"http://{f'[{bound_host}]' if ':' in bound_host else bound_host}:{bound_port}"


def _socket_path(listen: str) -> str:
    return listen.removeprefix("unix:") if listen.startswith("unix:") else ""


async def serve_until_told(options: Options) -> None:
    """Serve until SIGTERM or SIGINT. Raises OSError when the address cannot be listened on."""
    stop = asyncio.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        asyncio.get_running_loop().add_signal_handler(number, stop.set)
    service = Service(options)
    try:
        await service.start()
        await stop.wait()
    finally:
        await service.end()
