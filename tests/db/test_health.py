"""Live and ready: what a load balancer asks, and what it is told when a part is missing."""

import socket
from collections.abc import Callable, Iterator
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
from django.db import OperationalError, connection, connections
from django.db.migrations.recorder import MigrationRecorder
from django.test.utils import CaptureQueriesContext

from labplan import datafiles
from labplan.base import append_only, broker, clock, outbox, warming
from labplan.base.models import OutboxMessage
from labplan.operations import readiness
from tests.json_log import json_log
from tests.laboratory import ApiTestClient

NAMES = ["database", "migrations", "triggers", "broker", "data", "engine", "outbox"]
pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture(autouse=True)
def _nothing_said_yet(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(readiness, "_noted", frozenset())
    monkeypatch.setattr(readiness, "_errors", {})


def ask(path: str = "/health/ready/") -> Any:
    response = ApiTestClient(None).get(path)
    assert response["Content-Type"] == "application/json"
    assert response["Cache-Control"] == "no-store"
    return response


def failing(status: int, word: str) -> dict[str, str]:
    """Name and detail of what fails; all else is as it should be."""
    response = ask()
    body = response.json()
    assert (response.status_code, body["status"]) == (status, word)
    assert [check["name"] for check in body["checks"]] == NAMES
    for check in body["checks"]:
        assert set(check) == {"name", "ok", "required", "detail", "duration_ms"}
        assert check["required"] is (check["name"] != "outbox")
        assert check["detail"].endswith(".")
    return {check["name"]: check["detail"] for check in body["checks"] if not check["ok"]}


def test_a_process_that_has_all_it_needs_is_ready() -> None:
    assert failing(200, "ready") == {}


def test_both_answers_lie_at_the_root_and_under_the_prefix() -> None:
    for path in ("/health/live/", "/api/v1/health/live/"):
        assert ask(path).json() == {"status": "live"}
    for path in ("/health/ready/", "/api/v1/health/ready/"):
        assert ask(path).json()["status"] == "ready"


def test_a_host_name_that_is_not_served_is_no_obstacle() -> None:
    """A balancer asks by the address of the machine."""
    response = ApiTestClient(None).get("/health/ready/", Host="10.1.2.3:8000")
    assert response.status_code == 200


def test_being_live_asks_no_database() -> None:
    with CaptureQueriesContext(connection) as captured:
        assert ask("/health/live/").status_code == 200
    assert len(captured) == 0


def test_looking_again_costs_a_few_reads_and_no_planning(monkeypatch: pytest.MonkeyPatch) -> None:
    ask()
    monkeypatch.setattr(warming, "_warmers", [lambda: pytest.fail("planned again")])
    with CaptureQueriesContext(connection) as captured:
        assert failing(200, "ready") == {}
    assert len(captured) <= 8
    for query in captured.captured_queries:
        assert query["sql"].lstrip().upper().startswith("SELECT")


def test_without_a_database_the_rest_is_still_told(monkeypatch: pytest.MonkeyPatch) -> None:
    def away(self: Any) -> Any:
        raise OperationalError('connection to "db.inside" failed, user lab, password hunter2')

    monkeypatch.setattr(type(connections["default"]), "cursor", away)
    with json_log() as log:
        found = failing(503, "not_ready")
    monkeypatch.undo()
    assert found == {
        "database": "The database does not answer: start it, or look at DATABASE_URL.",
        "migrations": "Not looked at: the database does not answer.",
        "triggers": "Not looked at: the database does not answer.",
        "outbox": "Not looked at: the database does not answer.",
    }
    [line] = [line for line in log() if "check" in line]
    assert line["check"] == "database"
    assert "db.inside" in line["message"]  # the log may say what the answer must not


def test_a_migration_that_is_not_applied_is_told() -> None:
    recorder = MigrationRecorder(connection)
    recorder.record_unapplied("inventory", "0001_initial")
    try:
        assert failing(503, "not_ready") == {
            "migrations": "1 are not applied: run 'manage.py migrate'."
        }
    finally:
        recorder.record_applied("inventory", "0001_initial")
    assert failing(200, "ready") == {}


def test_triggers_that_are_missing_are_told() -> None:
    two_a_table = 2 * len(append_only.append_only_tables())
    with append_only.lifted(connection):
        assert failing(503, "not_ready") == {
            "triggers": f"{two_a_table} that protect the books are missing: "
            "run 'manage.py migrate'."
        }
    assert failing(200, "ready") == {}


def test_the_trigger_of_an_app_is_missed_too() -> None:
    from tests.db.bench import drop_trigger

    assert append_only.missing_triggers() == set()
    drop_trigger("inventory_movement", "inventory_movement_carries_on")
    try:
        assert append_only.missing_triggers() == {"inventory_movement_carries_on"}
        assert list(failing(503, "not_ready")) == ["triggers"]
    finally:
        append_only.install_all()
    assert append_only.missing_triggers() == set()


@pytest.fixture
def broker_at(settings: Any) -> Iterator[Callable[[str], None]]:
    def use(address: str) -> None:
        settings.BROKER_URL = address
        broker.client.cache_clear()

    yield use
    broker.client.cache_clear()


AWAY = {"broker": "The broker does not answer: start it, or look at REDIS_URL."}


def test_a_broker_that_is_away_is_told(broker_at: Callable[[str], None], tmp_path: Path) -> None:
    broker_at(f"redis+socket://{tmp_path}/nobody.sock")
    assert failing(503, "not_ready") == AWAY
    broker_at("")
    assert failing(200, "ready") == {}


def test_a_broker_that_takes_the_call_and_says_nothing_is_not_waited_for(
    broker_at: Callable[[str], None],
) -> None:
    with socket.create_server(("127.0.0.1", 0)) as silent:
        broker_at(f"redis://:hunter2@127.0.0.1:{silent.getsockname()[1]}/0")
        with json_log() as log:
            assert failing(503, "not_ready") == AWAY
    assert "hunter2" not in str(log())


def test_tables_that_changed_under_the_process_are_told(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    datafiles.data_version()
    for name in datafiles.PLANNING_TABLES:
        (tmp_path / f"{name}.json").write_bytes((datafiles.FOLDER / f"{name}.json").read_bytes())
    monkeypatch.setattr(datafiles, "FOLDER", tmp_path)
    assert failing(200, "ready") == {}
    (tmp_path / "methods.json").write_text("{}")
    assert failing(503, "not_ready") == {
        "data": "The packaged tables changed under this process: restart it."
    }
    (tmp_path / "methods.json").unlink()
    assert failing(503, "not_ready") == {
        "data": "The packaged tables cannot be read: install labplan again."
    }


def test_an_engine_that_cannot_plan_is_told_and_tried_again_after_a_while(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    tried: list[float] = []

    def breaks() -> None:
        tried.append(len(tried))
        if len(tried) == 1:
            raise RuntimeError("no memory")

    monkeypatch.setattr(warming, "_warmers", [breaks])
    monkeypatch.setattr(warming, "_is_warm", False)
    monkeypatch.setattr(warming, "_failed_at", float("-inf"))
    for _ in range(3):
        assert failing(503, "not_ready") == {
            "engine": "The engine cannot plan its own test target; the log says why."
        }
    assert len(tried) == 1
    monkeypatch.setattr(warming, "TRY_AGAIN_AFTER_S", 0.0)
    for _ in range(3):
        assert failing(200, "ready") == {}
    assert len(tried) == 2


def test_what_waits_long_in_the_outbox_is_a_warning_only() -> None:
    for seconds, expected in ((readiness.WAITED_LONG_S, {}), (readiness.WAITED_LONG_S + 1, None)):
        OutboxMessage.objects.all().delete()
        OutboxMessage.objects.create(
            topic="t", queue="documents", payload="{}", available_at=clock.now(),
            created_at=clock.now() - timedelta(seconds=seconds),
        )  # fmt: skip
        if expected is not None:
            assert failing(200, "ready") == expected
    assert failing(200, "ready_with_warnings") == {
        "outbox": "The oldest unfinished message has waited 301 s: look at the relay and the "
        "workers."
    }


def test_a_paused_outbox_is_a_warning_without_its_reason() -> None:
    outbox.pause("restored from the backup of LECTIN-07")
    assert failing(200, "ready_with_warnings") == {
        "outbox": "It is paused: nothing is sent until 'manage.py outbox resume'."
    }
    outbox.resume()
    assert failing(200, "ready") == {}


def test_a_check_that_breaks_off_does_not_break_the_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    def breaks() -> str:
        raise KeyError("a secret")

    checks = tuple(
        readiness.Check(check.name, breaks) if check.name == "broker" else check
        for check in readiness.CHECKS
    )
    monkeypatch.setattr(readiness, "CHECKS", checks)
    assert failing(503, "not_ready") == {
        "broker": "The check broke off; the log of this process says why."
    }


def test_the_log_says_once_that_a_check_fails_and_once_that_it_is_well() -> None:
    with json_log() as log:
        ask()
        outbox.pause("to see")
        for _ in range(3):
            ask()
        outbox.resume()
        for _ in range(3):
            ask()
    said = [(line["level"], line["check"]) for line in log() if "check" in line]
    assert said == [("WARNING", "outbox"), ("INFO", "outbox")]
