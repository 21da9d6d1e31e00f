"""Read the log as a collector of logs would: JSON, a line a record."""

import io
import json
import logging
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from labplan.base.logs import JsonFormatter, logging_configuration

Lines = Callable[[], list[dict[str, Any]]]


@contextmanager
def json_log(level: int = logging.INFO) -> Iterator[Lines]:
    """Gives a function that returns the lines so far; levels and filters are those of a server."""
    stream = io.StringIO()
    handler = logging.StreamHandler(stream)
    handler.setFormatter(JsonFormatter())
    root, before = logging.getLogger(), logging.getLogger().level
    django = logging.getLogger("django.request")
    only_tracebacks = logging_configuration("json")["filters"]["only_tracebacks"]["()"]()
    django.addFilter(only_tracebacks)
    root.addHandler(handler)
    root.setLevel(level)
    try:
        yield lambda: [json.loads(line) for line in stream.getvalue().splitlines()]
    finally:
        root.removeHandler(handler)
        root.setLevel(before)
        django.removeFilter(only_tracebacks)
