"""The outbox: at least once, not by two at once, never for ever."""

import json
import threading
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from typing import Any

import pytest
from django.db import transaction

from labplan.base import clock, outbox
from labplan.base.models import Event, OutboxMessage
from labplan.base.outbox import messages, topics
from tests.db.bench import at_once

NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)
TOPIC = "test.topic"
LIMIT_S = 60
# how long a run that says nothing is waited for
LEASE = timedelta(seconds=LIMIT_S + outbox.GRACE_S)
pytestmark = pytest.mark.django_db(transaction=True)
Handle = Callable[[outbox.Handler], None]


@pytest.fixture
def handle(monkeypatch: pytest.MonkeyPatch) -> Handle:
    """Give the topic of these tests a handler."""

    def register(handler: outbox.Handler) -> None:
        topic = topics.Topic(handler, outbox.HOUSEKEEPING, LIMIT_S)
        monkeypatch.setitem(topics._topics, TOPIC, topic)

    return register


def _message() -> OutboxMessage:
    return OutboxMessage.objects.get()


def _deliver_after(seconds: float) -> int:
    with clock.replaced_by(clock.standing_at(NOON + timedelta(seconds=seconds))):
        return outbox.deliver_waiting()


def _fails(payload: dict[str, Any], message_id: int) -> None:
    raise ValueError("it does not work")


def test_a_message_is_delivered_once_and_then_done(handle: Handle) -> None:
    seen = []

    def handler(payload: dict[str, Any], message_id: int) -> None:
        seen.append((payload, message_id))
        outbox.mark_done(message_id)

    handle(handler)
    number = outbox.enqueue(TOPIC, {"procedure_id": 7})
    assert outbox.deliver_waiting() == 1
    assert outbox.deliver_waiting() == 0
    assert _deliver_after(10_000) == 0
    assert seen == [({"procedure_id": 7}, number)]
    message = _message()
    assert (message.state, message.attempts, message.done_at) == ("done", 1, NOON)
    assert message.lease_until is None


def test_a_payload_went_through_json(handle: Handle) -> None:
    """What a handler gets is what another process would get: text, never the caller's objects."""
    seen: list[Any] = []
    handle(lambda payload, message_id: seen.append(payload))
    given = {"numbers": (1, 2), 3: "three", "nothing": None}
    outbox.enqueue(TOPIC, given)
    assert json.loads(_message().payload) == {"numbers": [1, 2], "3": "three", "nothing": None}
    outbox.deliver_waiting()
    assert seen == [{"numbers": [1, 2], "3": "three", "nothing": None}]
    with pytest.raises(TypeError):
        outbox.enqueue(TOPIC, {"amount": Decimal(1)})
    assert OutboxMessage.objects.count() == 1


def test_a_message_of_a_rolled_back_request_is_never_seen(handle: Handle) -> None:
    handle(_fails)
    with transaction.atomic():
        outbox.enqueue(TOPIC, {})
        transaction.set_rollback(True)
    assert outbox.deliver_waiting() == 0
    assert OutboxMessage.objects.count() == 0


def test_what_was_sent_and_not_done_comes_again_when_its_lease_ends(handle: Handle) -> None:
    seen = []
    handle(lambda payload, message_id: seen.append(message_id))
    number = outbox.enqueue(TOPIC, {})
    assert outbox.deliver_waiting() == 1
    message = _message()
    assert (message.state, message.lease_until) == ("sent", NOON + LEASE)
    assert _deliver_after(LEASE.total_seconds() - 1) == 0
    assert _deliver_after(LEASE.total_seconds()) == 1
    assert seen == [number, number]
    assert _message().attempts == 2


def test_the_wait_after_a_failure_doubles(handle: Handle) -> None:
    handle(_fails)
    outbox.enqueue(TOPIC, {})
    now, waits = 0.0, []
    for _ in range(outbox.MAX_ATTEMPTS - 1):
        assert _deliver_after(now) == 1
        due = (_message().available_at - NOON).total_seconds()
        assert _message().state == "new"
        waits.append(due - now)
        assert _deliver_after(due - 0.5) == 0
        now = due
    assert waits == [2, 4, 8, 16, 32, 64, 128]
    assert _message().last_error == "ValueError: it does not work"


def test_the_wait_is_capped(handle: Handle, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(messages, "MAX_ATTEMPTS", 40)
    handle(_fails)
    outbox.enqueue(TOPIC, {})
    OutboxMessage.objects.update(attempts=20)
    assert outbox.deliver_waiting() == 1
    assert _message().available_at == NOON + timedelta(seconds=outbox.LONGEST_BACK_OFF_S)


def test_a_message_that_fails_too_often_is_dead_and_says_why(handle: Handle) -> None:
    handle(_fails)
    outbox.enqueue(TOPIC, {})
    OutboxMessage.objects.update(attempts=outbox.MAX_ATTEMPTS - 1)
    assert outbox.deliver_waiting() == 1
    message = _message()
    assert (message.state, message.attempts) == ("dead", outbox.MAX_ATTEMPTS)
    assert message.last_error == "ValueError: it does not work"
    assert _deliver_after(1_000_000) == 0


def test_a_message_whose_process_dies_each_time_is_dead_in_the_end(handle: Handle) -> None:
    """Nobody puts such a message back: only its lease ends. It must not come for ever."""
    seen = []
    handle(lambda payload, message_id: seen.append(message_id))
    outbox.enqueue(TOPIC, {})
    lease_s = LEASE.total_seconds()
    for number in range(outbox.MAX_ATTEMPTS + 3):
        _deliver_after(number * lease_s)
    assert len(seen) == outbox.MAX_ATTEMPTS
    message = _message()
    assert (message.state, message.attempts) == ("dead", outbox.MAX_ATTEMPTS)
    assert "broke off" in message.last_error


def test_an_unknown_topic_is_put_back_with_the_reason() -> None:
    outbox.enqueue("nobody.listens", {})
    assert outbox.deliver_waiting() == 1
    message = _message()
    assert (message.state, message.attempts) == ("new", 1)
    assert message.last_error == "LookupError: no handler for the topic 'nobody.listens'"


def test_a_failing_message_does_not_stop_those_after_it(handle: Handle) -> None:
    def handler(payload: dict[str, Any], message_id: int) -> None:
        if payload["number"] == 1:
            raise ValueError("this one")
        outbox.mark_done(message_id)

    handle(handler)
    for number in range(3):
        outbox.enqueue(TOPIC, {"number": number})
    assert outbox.deliver_waiting() == 3
    states = OutboxMessage.objects.order_by("id").values_list("state", flat=True)
    assert list(states) == ["done", "new", "done"]


def test_done_falls_with_the_handlers_transaction(handle: Handle) -> None:
    def handler(payload: dict[str, Any], message_id: int) -> None:
        with transaction.atomic():
            Event.objects.create(at=clock.now(), actor_code="A", kind="test", subject="s")
            outbox.mark_done(message_id)
            raise ValueError("after done was set")

    handle(handler)
    outbox.enqueue(TOPIC, {})
    assert outbox.deliver_waiting() == 1
    message = _message()
    assert (message.state, message.done_at) == ("new", None)
    assert message.last_error == "ValueError: after done was set"
    assert Event.objects.count() == 0


def test_what_failed_after_it_was_done_stays_done(handle: Handle) -> None:
    def handler(payload: dict[str, Any], message_id: int) -> None:
        outbox.mark_done(message_id)
        raise ValueError("too late to matter")

    handle(handler)
    outbox.enqueue(TOPIC, {})
    assert outbox.deliver_waiting() == 1
    assert _message().state == "done"
    assert _deliver_after(10_000) == 0


def test_two_relays_never_run_the_same_message(handle: Handle) -> None:
    seen: list[tuple[int, str]] = []

    def handler(payload: dict[str, Any], message_id: int) -> None:
        seen.append((message_id, threading.current_thread().name))
        outbox.mark_done(message_id)

    handle(handler)
    numbers = [outbox.enqueue(TOPIC, {}) for _ in range(24)]

    def relay() -> int:
        return sum(outbox.deliver_waiting(limit=2) for _ in range(16))

    delivered = at_once(relay, relay, relay)
    assert sum(delivered) == 24
    assert sorted(number for number, _ in seen) == numbers
    assert set(OutboxMessage.objects.values_list("state", "attempts")) == {("done", 1)}


def test_a_late_failure_does_not_take_the_message_from_the_next_run(handle: Handle) -> None:
    """The first run outlives its lease, the second is at work; the first then fails."""
    runs: list[int] = []

    def handler(payload: dict[str, Any], message_id: int) -> None:
        runs.append(message_id)
        if len(runs) == 1:
            [delivered] = at_once(lambda: _deliver_after(LEASE.total_seconds()))
            assert delivered == 1
            raise ValueError("the first run fails late")

    handle(handler)
    outbox.enqueue(TOPIC, {})
    assert outbox.deliver_waiting() == 1
    assert len(runs) == 2
    message = _message()
    assert (message.state, message.attempts) == ("sent", 2)
    assert message.lease_until == NOON + 2 * LEASE
    assert message.last_error == ""


def test_a_look_that_finds_nothing_writes_nothing(handle: Handle) -> None:
    """The relay polls: on SQLite it must not take the only writer's place for nothing."""
    from django.db import connection
    from django.test.utils import CaptureQueriesContext

    handle(_fails)
    with CaptureQueriesContext(connection) as captured:
        assert outbox.deliver_waiting() == 0
    [query] = captured.captured_queries
    assert query["sql"].startswith("SELECT")


def test_the_oldest_come_first_and_no_more_than_asked_for(handle: Handle) -> None:
    seen: list[int] = []
    handle(lambda payload, message_id: seen.append(payload["number"]))
    for number in range(5):
        outbox.enqueue(TOPIC, {"number": number})
    assert outbox.deliver_waiting(limit=3) == 3
    assert seen == [0, 1, 2]
