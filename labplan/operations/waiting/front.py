"""What happens to a request: passed on, or held until there is something new to say."""

import asyncio
from contextlib import suppress

import aiohttp
from aiohttp import web

from labplan.base.errors import DomainError
from labplan.operations.waiting.headers import procedure_in, target_of, to_web_service
from labplan.operations.waiting.hints import Hints
from labplan.operations.waiting.passing import (
    AWAY,
    Kept,
    give,
    is_fine,
    is_unsettled,
    pass_on,
    problem,
    read_body,
)
from labplan.operations.waiting.prefer import wanted_wait_s
from labplan.operations.waiting.upstream import Question, WebService

MOST_WAITING = 200
LOOK_AGAIN_S = 1.0  # without a hint
# All who wait together ask the web service at most so often and so many at a time without a hint,
# so that they leave it to those who do not wait.
LOOKS_PER_S = 40
LOOKS_AT_A_TIME = 2
LAST_LOOK_S = 2.0  # for the look at the end of the time
_VARY = {"Vary": "Prefer"}


class FrontDoor:
    """The handler of all requests."""

    def __init__(self, web_service: WebService, hints: Hints, *, most_waiting: int) -> None:
        self._web_service = web_service
        self._hints = hints
        self._most_waiting = most_waiting
        self._limits: set[asyncio.Timeout] = set()  # one for each that waits
        self._turns = asyncio.Semaphore(LOOKS_AT_A_TIME)
        self._is_stopping = False

    @property
    def waiting(self) -> int:
        return len(self._limits)

    def let_go(self) -> None:
        """Give all who wait what is known now, and hold nobody any more."""
        self._is_stopping = True
        now = _now()
        for limit in self._limits:
            with suppress(RuntimeError):  # it is running out by itself just now
                limit.reschedule(now)

    async def answer(self, request: web.BaseRequest) -> web.StreamResponse:
        try:
            wait_s = None
            if request.method == "GET" and not request.body_exists:
                wait_s = wanted_wait_s(request.headers.getall("Prefer", ()))
            question = Question(
                request.method, target_of(request),
                to_web_service(request, is_waiting=wait_s is not None), await read_body(request),
            )  # fmt: skip
            if wait_s is None:
                async with self._web_service.ask(question) as answer:
                    return await pass_on(request, answer, {})
            return await self._answer_in_time(request, question, wait_s)
        except DomainError as error:
            return problem(error)

    async def _answer_in_time(
        self, request: web.BaseRequest, question: Question, wait_s: int
    ) -> web.StreamResponse:
        """The settled answer as soon as there is one, or the latest when the time is up."""
        until = _now() + wait_s
        applied = {**_VARY, "Preference-Applied": f"wait={wait_s}"}
        with self._hints.listening(procedure_in(question.target)) as bell:
            async with self._web_service.ask(question) as first:
                if not is_unsettled(first) or wait_s == 0:
                    return await pass_on(request, first, applied if is_fine(first) else _VARY)
                if self._is_stopping or self.waiting >= self._most_waiting:
                    return await pass_on(request, first, _VARY)
                latest = await self._hold(question, first, bell, until)
        return give(latest, applied if is_fine(latest) else _VARY)

    async def _hold(
        self, question: Question, first: aiohttp.ClientResponse, bell: asyncio.Event, until: float
    ) -> Kept:
        limit = asyncio.timeout_at(until + LAST_LOOK_S)
        self._limits.add(limit)  # a place is taken before anything is awaited
        try:
            latest = await Kept.read(first)
            with suppress(TimeoutError):
                async with limit:
                    while is_unsettled(latest) and not self._is_stopping and _now() < until:
                        await self._hint_or_pause(bell, until)
                        latest = await self._look_again(question) or latest
            return latest
        finally:
            self._limits.discard(limit)

    async def _hint_or_pause(self, bell: asyncio.Event, until: float) -> None:
        pause_s = max(LOOK_AGAIN_S, self.waiting / LOOKS_PER_S)
        with suppress(TimeoutError):
            async with asyncio.timeout_at(min(until, _now() + pause_s)):
                await bell.wait()
        bell.clear()  # before asking: what changes from here on rings again

    async def _look_again(self, question: Question) -> Kept | None:
        """The present answer; None while the web service is away (it may be restarting)."""
        try:
            async with self._turns, self._web_service.ask(question) as answer:
                return None if answer.status in AWAY else await Kept.read(answer)
        except DomainError:
            return None


def _now() -> float:
    return asyncio.get_running_loop().time()
