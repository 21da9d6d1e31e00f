"""The header Prefer (RFC 7240): for how long a client wishes to wait."""

import re
from collections.abc import Iterable, Iterator

LONGEST_WAIT_S = 10
_TOKEN = r"[!#$%&'*+.^_`|~0-9A-Za-z-]+"
_QUOTED = r'"(?:[^"\\]|\\.)*"'
_ONE = re.compile(rf"({_TOKEN})(?:[ \t]*=[ \t]*({_TOKEN}|{_QUOTED}))?")


def wanted_wait_s(lines: Iterable[str]) -> int | None:
    """The seconds of `wait=N`, 10 at most; None when none is asked for or it is malformed.

    The first `wait` counts, whatever follows it.

    >>> wanted_wait_s(["respond-async, wait=100", "handling=lenient"])
    10
    """
    for line in lines:
        for part in _split(line, ","):
            name, value = _read(part)
            if name == "wait":
                return _seconds(value)
    return None


def without_wait(lines: Iterable[str]) -> Iterator[str]:
    """The same lines less every `wait`; lines that had nothing else are left out.

    >>> list(without_wait(["respond-async, wait=100", "WAIT=5", "handling=lenient"]))
    ['respond-async', 'handling=lenient']
    """
    for line in lines:
        parts = [part.strip(" \t") for part in _split(line, ",") if _read(part)[0] != "wait"]
        if kept := ", ".join(part for part in parts if part):
            yield kept


def _read(part: str) -> tuple[str, str]:
    """Name in small letters and value of one preference; two empty texts when it is malformed."""
    first, *parameters = (item.strip(" \t") for item in _split(part, ";"))
    found = _ONE.fullmatch(first)
    if found is None or not all(_ONE.fullmatch(item) for item in parameters if item):
        return "", ""
    return found[1].lower(), _unquoted(found[2] or "")


def _split(text: str, separator: str) -> list[str]:
    """Split outside of quoted strings; one that is never closed runs to the end.

    One pass, sign by sign: a regular expression would try long quotations again and again.
    """
    parts, start, is_quoted, is_escaped = [], 0, False, False
    for place, sign in enumerate(text):
        if is_escaped:
            is_escaped = False
        elif is_quoted and sign == "\\":
            is_escaped = True
        elif sign == '"':
            is_quoted = not is_quoted
        elif sign == separator and not is_quoted:
            parts.append(text[start:place])
            start = place + 1
    return [*parts, text[start:]]


def _unquoted(value: str) -> str:
    return re.sub(r"\\(.)", r"\1", value[1:-1]) if value.startswith('"') else value


def _seconds(value: str) -> int | None:
    if not (value.isascii() and value.isdigit()):
        return None
    digits = value.lstrip("0") or "0"
    return LONGEST_WAIT_S if len(digits) > 2 else min(int(digits), LONGEST_WAIT_S)
