"""How a log line looks: one readable line, or one JSON object a line; both with the request id.

Knows nothing of Django, so that the web server can use it before the application is loaded.
Fields beside the message come by `logger.info(text, extra={...})`; only plain values are written.
What looks like a token or a password in an address is blotted out wherever it stands.
"""

import json
import logging
import re
from datetime import UTC, datetime
from typing import Any

from labplan.base import tracing

STYLES = ("plain", "json")
_ORDINARY = frozenset(vars(logging.makeLogRecord({}))) | {"message", "asctime", "taskName"}
_OWN_FIELDS = frozenset({"time", "level", "logger", "message", "request_id", "exception"})
_SECRETS = (
    (re.compile(r"\blpt_[A-Za-z0-9_-]+"), "lpt_***"),
    (re.compile(r"(?i)\b(bearer)\s+[^\s'\",]+"), r"\1 ***"),
    (re.compile(r"(\w://[^\s/:@'\"]*):[^\s/@'\"]+@"), r"\1:***@"),
)
# Whatever a terminal or a reader of lines would take for a new line or a command.
_CONTROLS = {
    code: f"\\x{code:02x}" for code in (*range(0x20), *range(0x7F, 0xA0))
} | {0x0A: "\\n", 0x0D: "\\r", 0x09: "\\t", 0x2028: "\\u2028", 0x2029: "\\u2029"}  # fmt: skip


def without_secrets(text: str) -> str:
    for pattern, instead in _SECRETS:
        text = pattern.sub(instead, text)
    return text


def extras_of(record: logging.LogRecord) -> dict[str, Any]:
    """The fields given beside the message, as far as they are plain values."""
    return {
        name: without_secrets(value) if isinstance(value, str) else value
        for name, value in vars(record).items()
        if name not in _ORDINARY | _OWN_FIELDS and isinstance(value, str | int | float | None)
    }


class _Formatter(logging.Formatter):
    """What both forms have in common."""

    def time_of(self, record: logging.LogRecord) -> str:
        """RFC 3339 in UTC, to the millisecond."""
        instant = datetime.fromtimestamp(record.created, UTC)
        return instant.isoformat(timespec="milliseconds").replace("+00:00", "Z")

    def trouble_of(self, record: logging.LogRecord) -> str:
        """Traceback and stack as text; empty when there are none."""
        parts = []
        if record.exc_info and record.exc_info[0] is not None:
            parts.append(self.formatException(record.exc_info))
        elif record.exc_text:
            parts.append(record.exc_text)
        if record.stack_info:
            parts.append(self.formatStack(record.stack_info))
        return without_secrets("\n".join(parts))


class PlainFormatter(_Formatter):
    """A line for people; only a traceback takes more lines, indented."""

    def format(self, record: logging.LogRecord) -> str:
        message = without_secrets(record.getMessage()).translate(_CONTROLS)
        request_id = tracing.current() or "-"
        line = f"{self.time_of(record)} {record.levelname} {record.name} [{request_id}] {message}"
        trouble = self.trouble_of(record)
        lines = [line, *(f"    {each.translate(_CONTROLS)}" for each in trouble.splitlines())]
        return "\n".join(lines)


class JsonFormatter(_Formatter):
    """An object a line for programs; a traceback is a text in it."""

    def format(self, record: logging.LogRecord) -> str:
        entry = {
            "time": self.time_of(record),
            "level": record.levelname,
            "logger": record.name,
            "message": without_secrets(record.getMessage()),
            "request_id": tracing.current() or None,
            **extras_of(record),
        }
        if trouble := self.trouble_of(record):
            entry["exception"] = trouble
        # ASCII only: no sign that some reader takes for the end of a line.
        return json.dumps(entry, ensure_ascii=True, default=str)


class OnlyTracebacks(logging.Filter):
    """Of Django's lines about answers, those that say more than our own."""

    def filter(self, record: logging.LogRecord) -> bool:
        return bool(record.exc_info)


_FORMATTERS = {"plain": PlainFormatter, "json": JsonFormatter}
# Other people's lines about what we log ourselves, or about every beat of a heart.
_QUIETER = {
    "celery.worker.strategy": "WARNING",
    "celery.app.trace": "WARNING",
    "celery.beat": "WARNING",
    "multiprocessing": "WARNING",
}


def logging_configuration(style: str) -> dict[str, Any]:
    """For logging.config.dictConfig: everything on standard error, in one form."""
    return {
        "version": 1,
        "disable_existing_loggers": False,
        "formatters": {"line": {"()": _FORMATTERS[style]}},
        "filters": {"only_tracebacks": {"()": OnlyTracebacks}},
        "handlers": {"stderr": {"class": "logging.StreamHandler", "formatter": "line"}},
        "loggers": {
            **{name: {"level": level} for name, level in _QUIETER.items()},
            "django.request": {"filters": ["only_tracebacks"]},
            # The framework's own handlers would print a line twice, or mail it.
            "django": {"level": "INFO", "handlers": [], "propagate": True},
        },
        "root": {"handlers": ["stderr"], "level": "INFO"},
    }
