"""ETag and If-Match: a change names the version it was made on.

What is shown may change without a new version (a place in a queue). Then the tag carries that too,
after a plus: If-None-Match compares all of the tag, If-Match only the version.
"""

from typing import Any

from django.utils.http import parse_etags

from labplan.base.errors import PreconditionMissing, StaleCopy


def etag_of(kind: str, code: str, version: int, *, seen: str = "") -> str:
    """`seen` is what changes without a version; it holds no quotation mark and no plus."""
    return f'"{kind}-{code}-v{version}+{seen}"' if seen else f'"{kind}-{code}-v{version}"'


def is_known(request: Any, current: str) -> bool:
    """Whether If-None-Match says that the caller has this already: answer 304."""
    given = parse_etags(request.headers.get("If-None-Match", ""))
    return "*" in given or current in {tag.removeprefix("W/") for tag in given}


def require_match(request: Any, current: str) -> None:
    """Raise 428 without If-Match, 412 when it names another version; weak tags never match.

    `current` names the version and nothing else that may be seen.
    """
    given = request.headers.get("If-Match", "")
    if not given:
        raise PreconditionMissing(
            f"Read it first and send its ETag as If-Match (now {current}), so that you do not "
            "act on what has changed meanwhile."
        )
    tags = parse_etags(given)
    if "*" not in tags and current not in {_of_version(tag) for tag in tags}:
        raise StaleCopy(f"It has changed: the ETag is now {current}. Read it again.")


def _of_version(tag: str) -> str:
    version, plus, _ = tag.partition("+")
    return f'{version}"' if plus else tag
