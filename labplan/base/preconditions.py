"""ETag and If-Match: a change names the version it was made on."""

from typing import Any

from django.utils.http import parse_etags

from labplan.base.errors import PreconditionMissing, StaleCopy


def etag_of(kind: str, code: str, version: int) -> str:
    return f'"{kind}-{code}-v{version}"'


def is_known(request: Any, current: str) -> bool:
    """Whether If-None-Match says that the caller has this already: answer 304."""
    given = parse_etags(request.headers.get("If-None-Match", ""))
    return "*" in given or current in {tag.removeprefix("W/") for tag in given}


def require_match(request: Any, current: str) -> None:
    """Raise 428 without If-Match, 412 when it names another version; weak tags never match."""
    given = request.headers.get("If-Match", "")
    if not given:
        raise PreconditionMissing(
            f"Read it first and send its ETag as If-Match (now {current}), so that you do not "
            "act on what has changed meanwhile."
        )
    if "*" not in parse_etags(given) and current not in parse_etags(given):
        raise StaleCopy(f"It has changed: the ETag is now {current}. Read it again.")
