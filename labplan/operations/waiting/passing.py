"""Bodies on their way through: from the client to the web service and back."""

import asyncio
import json
from collections.abc import AsyncIterator, Mapping
from dataclasses import dataclass

import aiohttp
from aiohttp import web
from multidict import CIMultiDict

from labplan.base.errors import DomainError
from labplan.base.problem_form import CONTENT_TYPE, problem_body
from labplan.operations.waiting.errors import ClientSlow
from labplan.operations.waiting.headers import add_marks, end_to_end
from labplan.operations.waiting.upstream import let_answers_in, refusal_for

CLIENT_SLOW_S = 30.0  # for one piece of a body, either way
SENT_WHOLE_BYTES = 256 * 1024  # bodies up to here take a worker only once they are complete
AWAY = (502, 503, 504)
_CONTINUE = b"HTTP/1.1 100 Continue\r\n\r\n"


@dataclass(frozen=True)
class Kept:
    """An answer that was read to its end, to be given later."""

    status: int
    reason: str | None
    headers: CIMultiDict[str]
    body: bytes

    @classmethod
    async def read(cls, answer: aiohttp.ClientResponse) -> "Kept":
        """Raises WebBrokeOff or WebSilent."""
        try:
            body = await answer.read()
        except (aiohttp.ClientError, TimeoutError) as error:
            raise refusal_for(error) from error
        return cls(answer.status, answer.reason, end_to_end(answer), body)


Answer = aiohttp.ClientResponse | Kept


def is_fine(answer: Answer) -> bool:
    return answer.status in (200, 304)


def is_unsettled(answer: Answer) -> bool:
    """Whether the web service says that looking again will show something else."""
    return is_fine(answer) and "Retry-After" in answer.headers


async def read_body(request: web.BaseRequest) -> bytes | AsyncIterator[bytes] | None:
    """The body: whole when it is small, else as a stream; None without one. Raises ClientSlow."""
    if not request.body_exists:
        return None
    if request.headers.get("Expect", "").lower() == "100-continue":
        await request.writer.write(_CONTINUE)
        request.writer.output_size = 0  # no part of the answer
    read = bytearray()
    while len(read) <= SENT_WHOLE_BYTES:
        piece = await _piece(request)
        if not piece:
            return bytes(read)
        read += piece
    return _stream(bytes(read), request)


async def _stream(begun: bytes, request: web.BaseRequest) -> AsyncIterator[bytes]:
    piece = begun
    while piece:
        yield piece
        piece = await _piece(request)
        await let_answers_in()


async def _piece(request: web.BaseRequest) -> bytes:
    try:
        async with asyncio.timeout(CLIENT_SLOW_S):
            return await request.content.readany()
    except TimeoutError as error:
        raise ClientSlow(f"Nothing of the body came for {CLIENT_SLOW_S:g} s.") from error


async def pass_on(
    request: web.BaseRequest, answer: aiohttp.ClientResponse, marks: Mapping[str, str]
) -> web.StreamResponse:
    """Give the client an answer while it still comes in.

    Raises ConnectionError when either side breaks off: the client's connection is closed then,
    which is the only way left to say that the answer is not whole.
    """
    headers = end_to_end(answer)
    add_marks(headers, marks)
    response = web.StreamResponse(status=answer.status, reason=answer.reason, headers=headers)
    await response.prepare(request)
    try:
        async for piece in answer.content.iter_any():
            async with asyncio.timeout(CLIENT_SLOW_S):
                await response.write(piece)
        async with asyncio.timeout(CLIENT_SLOW_S):
            await response.write_eof()
    except (aiohttp.ClientError, TimeoutError) as error:
        if request.transport is not None:
            request.transport.abort()
        raise ConnectionAbortedError(str(error)) from error
    return response


def give(kept: Kept, marks: Mapping[str, str]) -> web.Response:
    headers = kept.headers.copy()
    add_marks(headers, marks)
    headers.pop("Content-Length", None)  # it is reckoned anew, the same
    return web.Response(
        status=kept.status, reason=kept.reason, headers=headers, body=kept.body or None
    )


def problem(error: DomainError) -> web.Response:
    """A refusal of this service, in the form of all others."""
    again = {"Retry-After": "1"} if error.status in AWAY else {}
    return web.Response(
        status=error.status, body=json.dumps(problem_body(error)).encode(),
        headers={"Content-Type": CONTENT_TYPE, "Server": "labplan", **again},
    )  # fmt: skip
