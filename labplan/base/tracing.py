"""One id for a request and all the work that follows from it: web, outbox, worker, log."""

import re
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar

LONGEST = 64
# A token sent by mistake is no id: it would stand in the log and in the outbox.
_GIVEN = re.compile(rf"(?!lpt_)[A-Za-z0-9._-]{{1,{LONGEST}}}")
_current: ContextVar[str] = ContextVar("request_id", default="")


def current() -> str:
    """The id of the request that is being worked on; empty outside of one."""
    return _current.get()


def new_id() -> str:
    return secrets.token_hex(8)


def id_from(given: str | None) -> str:
    """What the caller gave as X-Request-ID if it is fit for a log line, else a new id."""
    return given if given and _GIVEN.fullmatch(given) else new_id()


@contextmanager
def working_on(request_id: str) -> Iterator[None]:
    """Let all that is logged or enqueued in this block carry the id."""
    token = _current.set(request_id)
    try:
        yield
    finally:
        _current.reset(token)
