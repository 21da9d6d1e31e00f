"""One record, one line: readable or JSON, with the request's id and without secrets."""

import json
import logging
import logging.config
import os
import subprocess
import sys
from datetime import datetime
from pathlib import Path
from typing import Any

import pytest
from django.core.exceptions import ImproperlyConfigured

from labplan.base import tracing
from labplan.base.logs import STYLES, JsonFormatter, PlainFormatter, logging_configuration
from labplan.settings.environment import one_of_words, whole_number

ROOT = Path(__file__).resolve().parents[2]
TOKEN = "lpt_Zx8-wwN_0aBcDeFgHiJkLmNoPqRsTuVwXyZ"
TRICKY = "one\ntwo\r\nthree\x1b[31m\u2028four\x85five"


def record(text: str, *args: Any, exc_info: Any = None, **fields: Any) -> logging.LogRecord:
    made = logging.getLogger("labplan.test").makeRecord(
        "labplan.test", logging.WARNING, "file.py", 1, text, args, exc_info, extra=fields
    )
    made.created = 1_796_126_400.1239
    return made


def as_json(made: logging.LogRecord) -> dict[str, Any]:
    line = JsonFormatter().format(made)
    assert line.isascii()
    assert len(line.splitlines()) == 1
    found: dict[str, Any] = json.loads(line)
    return found


def caught() -> Any:
    try:
        raise ValueError(f"broke with {TOKEN}\nand more")
    except ValueError:
        return sys.exc_info()


def test_a_json_line_has_exactly_these_fields() -> None:
    with tracing.working_on("an-id"):
        entry = as_json(record("%s of %d", "two", 3, procedure="P-1", duration_ms=1.5, actor=None))
    assert entry == {
        "time": "2026-12-01T12:00:00.123Z",
        "level": "WARNING",
        "logger": "labplan.test",
        "message": "two of 3",
        "request_id": "an-id",
        "procedure": "P-1",
        "duration_ms": 1.5,
        "actor": None,
    }
    assert datetime.fromisoformat(entry["time"]).utcoffset() is not None


def test_outside_of_a_request_there_is_no_id() -> None:
    assert as_json(record("x"))["request_id"] is None
    assert PlainFormatter().format(record("x")) == (
        "2026-12-01T12:00:00.123Z WARNING labplan.test [-] x"
    )


def test_objects_that_libraries_attach_are_left_out() -> None:
    entry = as_json(record("x", request=object(), data={"args": [1]}, status_code=404))
    assert set(entry) == {"time", "level", "logger", "message", "request_id", "status_code"}


def test_a_field_cannot_replace_what_every_line_has() -> None:
    made = record("the message", level="x", logger="y", request_id="z", time="t", exception="e")
    entry = as_json(made)
    assert (entry["message"], entry["level"], entry["request_id"]) == (
        "the message", "WARNING", None,
    )  # fmt: skip
    assert entry["logger"] == "labplan.test"
    assert entry["time"].startswith("2026-")
    assert "exception" not in entry


def test_nothing_in_a_message_begins_a_new_line() -> None:
    assert as_json(record(TRICKY, path=TRICKY))["message"] == TRICKY
    line = PlainFormatter().format(record(TRICKY))
    assert line.endswith("[-] one\\ntwo\\r\\nthree\\x1b[31m\\u2028four\\x85five")
    assert len(line.splitlines()) == 1


def test_an_exception_is_a_text_in_the_object() -> None:
    entry = as_json(record("it broke", exc_info=caught()))
    assert entry["exception"].startswith("Traceback (most recent call last):\n")
    assert "ValueError: broke with lpt_***\nand more" in entry["exception"]


def test_in_plain_form_only_the_traceback_takes_more_lines_all_indented() -> None:
    first, *rest = PlainFormatter().format(record("it broke", exc_info=caught())).splitlines()
    assert first.endswith("[-] it broke")
    assert rest[0] == "    Traceback (most recent call last):"
    assert rest[-2:] == ["    ValueError: broke with lpt_***", "    and more"]


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        (f"got {TOKEN}.", "got lpt_***."),
        ("Authorization: Bearer abc.def", "Authorization: Bearer ***"),
        ("redis://:hunter2@host:6379/0 is away", "redis://:***@host:6379/0 is away"),
        ("postgresql://lab:hun%40ter2@db/lab", "postgresql://lab:***@db/lab"),
        ("http://127.0.0.1:8000/a:b@c", "http://127.0.0.1:8000/a:b@c"),
    ],
)
def test_tokens_and_passwords_are_blotted_out(text: str, shown: str) -> None:
    assert as_json(record("%s", text, path=text)) | {"time": ""} == {
        "time": "", "level": "WARNING", "logger": "labplan.test", "message": shown,
        "request_id": None, "path": shown,
    }  # fmt: skip
    assert PlainFormatter().format(record(text)).endswith(shown)


def test_only_the_known_forms_are_taken(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("LABPLAN_LOG", raising=False)
    assert one_of_words("LABPLAN_LOG", STYLES) == "plain"
    monkeypatch.setenv("LABPLAN_LOG", "json")
    assert one_of_words("LABPLAN_LOG", STYLES) == "json"
    for given in ("JSON", "xml", " json"):
        monkeypatch.setenv("LABPLAN_LOG", given)
        with pytest.raises(ImproperlyConfigured, match="give one of plain, json"):
            one_of_words("LABPLAN_LOG", STYLES)


def test_a_number_out_of_bounds_is_refused_at_start(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("LABPLAN_WEB_WORKERS", "3")
    assert whole_number("LABPLAN_WEB_WORKERS", 8, highest=64) == 3
    for given in ("0", "65", "-1", "two", "1.5"):
        monkeypatch.setenv("LABPLAN_WEB_WORKERS", given)
        with pytest.raises(ImproperlyConfigured, match="give a whole number, 1 to 64"):
            whole_number("LABPLAN_WEB_WORKERS", 8, highest=64)


def run_python(program: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", program], cwd=ROOT, text=True, capture_output=True, check=False,
        timeout=60, env={**os.environ, **environment},
    )  # fmt: skip


def test_a_wrong_form_stops_the_start() -> None:
    ended = run_python("import labplan.settings.default", LABPLAN_LOG="yaml")
    assert ended.returncode == 1
    assert "LABPLAN_LOG='yaml': give one of plain, json." in ended.stderr


# What `celery worker` and `celery beat` do at their start, without a broker.
CELERY = """
import logging, warnings
from labplan.celery import app
app.loader.init_worker()
app.log.setup(loglevel="DEBUG", redirect_stdouts=True)
root = logging.getLogger()
assert [type(h.formatter).__name__ for h in root.handlers] == ["JsonFormatter"], root.handlers
assert root.level == logging.INFO
names = [n for n in logging.root.manager.loggerDict if n.startswith(("celery", "kombu"))]
handlers = [handler for name in names for handler in logging.getLogger(name).handlers]
assert {type(handler) for handler in handlers} <= {logging.NullHandler}, handlers
logging.getLogger("celery.worker").info("from\\ncelery")
logging.getLogger("celery.app.trace").info("a line for each task")
warnings.warn("a warning")
from billiard.util import get_logger
get_logger().error("a child died")
"""


def test_celery_writes_lines_like_everybody_else(tmp_path: Path) -> None:
    ended = run_python(
        CELERY, DJANGO_SETTINGS_MODULE="labplan.settings.default", LABPLAN_LOG="json",
        LABPLAN_DATA_DIR=str(tmp_path), DATABASE_URL="",
    )  # fmt: skip
    assert ended.returncode == 0, ended.stderr
    lines = [json.loads(line) for line in ended.stderr.splitlines()]
    assert [line["logger"] for line in lines] == [
        "celery.worker", "py.warnings", "multiprocessing",
    ]  # fmt: skip
    assert lines[0]["message"] == "from\ncelery"
    assert "a warning" in lines[1]["message"]


@pytest.mark.parametrize("style", STYLES)
def test_the_configuration_is_one_that_logging_takes(style: str) -> None:
    ended = run_python(
        "import logging, logging.config\n"
        "from labplan.base.logs import logging_configuration\n"
        f"logging.config.dictConfig(logging_configuration({style!r}))\n"
        "logging.getLogger('django.request').warning('Not Found: /x')\n"
        "logging.getLogger('labplan').info('once')\n"
    )
    assert ended.returncode == 0
    [line] = ended.stderr.splitlines()
    assert "once" in line
    assert logging_configuration(style)["root"] == {"handlers": ["stderr"], "level": "INFO"}
