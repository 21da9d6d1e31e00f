"""One id from the request through the outbox and the relay to the worker, in every log line."""

from typing import Any

import pytest
from django.db import transaction

from labplan.base import outbox, tasks, tracing
from labplan.base.models import OutboxMessage
from labplan.procedures.models import Procedure
from labplan.procedures.services.changes import note_settled
from tests.json_log import json_log
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

Published = list[dict[str, Any]]


@pytest.fixture
def published(monkeypatch: pytest.MonkeyPatch) -> Published:
    """What the relay gives to the broker; nothing goes out."""
    taken: Published = []
    monkeypatch.setattr(tasks.run_message, "apply_async", lambda **given: taken.append(given))
    return taken


def fields(line: dict[str, Any], *names: str) -> tuple[Any, ...]:
    return tuple(line[name] for name in names)


def test_one_id_leads_from_the_request_to_the_settled_procedure(
    live_lab: Laboratory, published: Published
) -> None:
    with json_log() as log:
        accepted = live_lab.client().post(PROCEDURES, octyl_order(), X_Request_ID="follow.me_1")
        code = accepted.json()["code"]
        message = OutboxMessage.objects.get()
        assert (accepted.status_code, message.request_id) == (202, "follow.me_1")
        assert outbox.publish_waiting(tasks.send_to_workers) == 1
        [sent] = published
        assert tracing.current() == ""
        tasks.run_message.run(*sent["args"])
        assert tracing.current() == ""
        lines = log()

    assert {line["request_id"] for line in lines} == {"follow.me_1"}
    answered, relayed, begun, settled, ended = lines
    assert fields(answered, "logger", "status", "actor") == ("labplan.requests", 202, "MIRA")
    assert fields(relayed, "message_id", "topic", "queue", "send") == (
        message.pk, "procedure.plan", "procedures", 1,
    )  # fmt: skip
    assert fields(begun, "message_id", "topic", "attempt") == (message.pk, "procedure.plan", 1)
    assert "outcome" not in begun
    assert fields(settled, "procedure", "state", "attempt") == (code, "planned", 1)
    assert fields(ended, "message_id", "outcome") == (message.pk, "done")
    assert ended["duration_ms"] > 0
    assert live_lab.client().get(accepted["Location"]).json()["state"] == "planned"


def test_a_run_that_fails_says_so_under_the_same_id(
    live_lab: Laboratory, published: Published, monkeypatch: pytest.MonkeyPatch
) -> None:
    def breaks(**_: Any) -> None:
        raise ValueError("it does not work")

    live_lab.client().post(PROCEDURES, octyl_order(), X_Request_ID="will-fail")
    outbox.publish_waiting(tasks.send_to_workers)
    monkeypatch.setattr("labplan.procedures.tasks.plan_procedure", breaks)
    with json_log() as log:
        tasks.run_message.run(*published[0]["args"])
    _begun, failed, ended = log()
    assert {line["request_id"] for line in log()} == {"will-fail"}
    assert failed["level"] == "ERROR"
    assert failed["exception"].endswith("ValueError: it does not work")
    assert fields(ended, "outcome", "attempt") == ("failed", 1)
    assert OutboxMessage.objects.get().state == "new"


def test_what_is_rolled_back_is_not_called_settled(live_lab: Laboratory) -> None:
    live_lab.client().post(PROCEDURES, octyl_order())
    procedure = Procedure.objects.get()
    for is_rolled_back in (True, False):
        with json_log() as log:
            with transaction.atomic():
                note_settled(procedure)
                assert log() == []
                transaction.set_rollback(is_rolled_back)
            found = [line["procedure"] for line in log()]
        assert found == ([] if is_rolled_back else [procedure.code])


def test_a_message_that_the_broker_does_not_take_is_not_called_sent(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    def away(**_: Any) -> None:
        raise OSError("the broker is away")

    live_lab.client().post(PROCEDURES, octyl_order())
    monkeypatch.setattr(tasks.run_message, "apply_async", away)
    with json_log() as log:
        with pytest.raises(OSError, match="away"):
            outbox.publish_waiting(tasks.send_to_workers)
        assert log() == []
    assert OutboxMessage.objects.get().state == "new"


def test_each_sweep_has_an_id_of_its_own(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    seen: list[str] = []

    def look(name: str) -> int:
        seen.append(tracing.current())
        return 2

    monkeypatch.setattr(tasks.housekeeping, "run_duty", look)
    with json_log() as log:
        tasks.run_sweep.run("a.sweep")
        tasks.run_sweep.run("a.sweep")
    assert [line["request_id"] for line in log()] == seen
    assert len(set(seen)) == 2
    assert "" not in seen
