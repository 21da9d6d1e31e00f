"""Which headers go on, and what a proxy adds to them."""

import re
from collections.abc import Iterable, Mapping
from urllib.parse import quote

from aiohttp import ClientResponse
from aiohttp.web import BaseRequest
from multidict import CIMultiDict, MultiMapping
from yarl import URL

from labplan.base.errors import MalformedRequest
from labplan.operations.waiting.prefer import without_wait

# Between two neighbours only (RFC 9110, 7.6.1). Expect is answered here, before a body is read.
_HOP_BY_HOP = frozenset({
    "connection", "expect", "keep-alive", "proxy-authenticate", "proxy-authorization",
    "proxy-connection", "te", "trailer", "transfer-encoding", "upgrade",
})  # fmt: skip
_PRINTABLE = "".join(map(chr, range(0x21, 0x7F)))
_PROCEDURE = re.compile(r"/procedures/([^/?#]+)/")


def end_to_end(message: BaseRequest | ClientResponse) -> CIMultiDict[str]:
    """All headers but those between two neighbours, as they were written, repeated ones too."""
    dropped = _HOP_BY_HOP | _listed(message.headers, "Connection")
    written = ((_text(name), _text(value)) for name, value in message.raw_headers)
    return CIMultiDict((name, value) for name, value in written if name.lower() not in dropped)


def _text(written: bytes) -> str:
    return written.decode("utf-8", "surrogateescape")


def to_web_service(request: BaseRequest, *, is_waiting: bool) -> CIMultiDict[str]:
    """The headers of a request as the web service gets them. Raises MalformedRequest."""
    headers = end_to_end(request)
    _require_text(headers.values())
    if is_waiting:
        lines = list(without_wait(headers.popall("Prefer")))
        headers.extend(("Prefer", line) for line in lines)
    if request.remote:  # none on a Unix socket: there the proxy before this has named the client
        before = headers.popall("X-Forwarded-For", [])
        headers["X-Forwarded-For"] = ", ".join([*before, request.remote])
    headers.setdefault("X-Forwarded-Proto", request.scheme)
    return headers


def _require_text(values: Iterable[str]) -> None:
    for value in values:
        try:
            value.encode()
        except UnicodeEncodeError as error:
            raise MalformedRequest("A header is not ASCII; write it so.") from error


def target_of(request: BaseRequest) -> str:
    """The target as it was written, for the web service to read. Raises MalformedRequest."""
    written = request.raw_path
    if not written.startswith("/"):
        if request.method == "CONNECT" or not written.startswith(("http://", "https://")):
            raise MalformedRequest("Ask for a path that begins with a slash.")
        written = URL(written, encoded=True).raw_path_qs
    return quote(written.encode("utf-8", "surrogateescape"), safe=_PRINTABLE)


def procedure_in(target: str) -> str:
    """The code of the procedure that is asked for; empty for other addresses."""
    found = _PROCEDURE.search(target)
    return found[1] if found else ""


def add_marks(headers: CIMultiDict[str], marks: Mapping[str, str]) -> None:
    """Set headers of this service; what the answer varies by is added to, not replaced."""
    for name, value in marks.items():
        if name != "Vary":
            headers[name] = value
        elif value.lower() not in _listed(headers, "Vary"):
            headers["Vary"] = ", ".join([*headers.popall("Vary", []), value])


def _listed(headers: MultiMapping[str], name: str) -> set[str]:
    return {item.strip().lower() for item in ",".join(headers.getall(name, ())).split(",")}
