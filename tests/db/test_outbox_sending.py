"""What goes over the broker: how much, which copy counts, and what a broker that is away costs."""

import json
from datetime import UTC, datetime, timedelta
from io import StringIO
from typing import Any

import pytest
from django.core.management import CommandError, call_command

from labplan.base import clock, outbox
from labplan.base.models import OutboxMessage, OutboxPause
from labplan.base.outbox import topics
from labplan.procedures.models import Procedure
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)
TOPIC = "test.topic"
pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture
def runs(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """The messages that were run, by a handler that marks them done."""
    found: list[int] = []

    def handler(payload: dict[str, Any], message_id: int) -> None:
        found.append(message_id)
        outbox.mark_done(message_id)

    monkeypatch.setitem(topics._topics, TOPIC, topics.Topic(handler, outbox.DOCUMENTS, 60))
    return found


def _after(seconds: float) -> Any:
    return clock.replaced_by(clock.standing_at(NOON + timedelta(seconds=seconds)))


def _published(**options: Any) -> list[tuple[int, int]]:
    """What one look of the relay sends: message and number of the copy."""
    sent: list[tuple[int, int]] = []
    outbox.publish_waiting(lambda row: sent.append((row.pk, row.sends)), **options)
    return sent


def test_a_message_is_sent_once_while_its_lease_lasts(runs: list[int]) -> None:
    number = outbox.enqueue(TOPIC, {})
    assert _published() == [(number, 1)]
    assert _published() == []
    with _after(outbox.lease().total_seconds() - 1):
        assert _published() == []
    with _after(outbox.lease().total_seconds()):
        assert _published() == [(number, 2)]
    assert OutboxMessage.objects.get().attempts == 0
    assert runs == []


def test_only_the_newest_copy_is_run(runs: list[int]) -> None:
    """The first copy lay in the broker too long; when both come through, one does the work."""
    number = outbox.enqueue(TOPIC, {})
    assert _published() == [(number, 1)]
    with _after(outbox.lease().total_seconds()):
        assert _published() == [(number, 2)]
        assert outbox.run_message(number, 1) == "left"
        assert runs == []
        assert outbox.run_message(number, 2) == "done"
        assert outbox.run_message(number, 2) == "left"
    assert runs == [number]


def test_waiting_in_a_full_broker_never_kills_a_message(runs: list[int]) -> None:
    """Only runs that were begun count towards giving up."""
    number = outbox.enqueue(TOPIC, {})
    for turn in range(outbox.MAX_ATTEMPTS + 3):
        with _after(turn * outbox.lease().total_seconds()):
            assert _published() == [(number, turn + 1)]
    assert OutboxMessage.objects.get().state == "sent"


def test_a_queue_has_no_more_on_its_way_than_its_window(runs: list[int]) -> None:
    numbers = [outbox.enqueue(TOPIC, {}) for _ in range(outbox.IN_FLIGHT + 5)]
    assert [number for number, _ in _published()] == numbers[: outbox.IN_FLIGHT]
    assert _published() == []
    for number in numbers[:3]:
        outbox.run_message(number, 1)
    assert [number for number, _ in _published()] == numbers[outbox.IN_FLIGHT :][:3]


def test_a_full_queue_does_not_hold_up_another(runs: list[int], live_lab: Laboratory) -> None:
    for _ in range(outbox.IN_FLIGHT + 1):
        outbox.enqueue(TOPIC, {})
    live_lab.client().post(PROCEDURES, octyl_order())
    plan = OutboxMessage.objects.get(queue="procedures").pk
    assert (plan, 1) in _published()


def test_a_broker_that_is_away_uses_up_no_attempt(runs: list[int]) -> None:
    numbers = [outbox.enqueue(TOPIC, {}) for _ in range(3)]
    taken: list[int] = []

    def send(row: OutboxMessage) -> None:
        if taken:
            raise ConnectionError("no broker")
        taken.append(row.pk)

    for _ in range(outbox.MAX_ATTEMPTS + 1):
        with pytest.raises(ConnectionError):
            outbox.publish_waiting(send)
        taken[:] = numbers[:1]
    rows = OutboxMessage.objects.order_by("pk").values_list("state", "attempts", "lease_until")
    assert [(state, attempts) for state, attempts, _ in rows] == [
        ("sent", 0), ("new", 0), ("new", 0),
    ]  # fmt: skip
    assert rows[1][2] is None
    assert [number for number, _ in _published()] == numbers[1:]


def test_a_paused_outbox_sends_nothing_and_runs_nothing_here(runs: list[int]) -> None:
    number = outbox.enqueue(TOPIC, {})
    outbox.pause("after a restore")
    outbox.pause("still looking")
    assert outbox.is_paused()
    assert OutboxPause.objects.get().reason == "still looking"
    assert _published() == []
    assert outbox.deliver_waiting() == 0
    assert outbox.resume() is True
    assert outbox.resume() is False
    assert _published() == [(number, 1)]


def test_a_given_up_plan_fails_its_procedure_and_can_be_sent_again(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*args: Any, **kwargs: Any) -> Any:
        raise OSError("no space left on device")

    client = live_lab.client()
    path = client.post(PROCEDURES, octyl_order())["Location"]
    with monkeypatch.context() as patch:
        patch.setattr("labplan.procedures.services.planning.compute_plan", broken)
        before = live_lab.counts()
        for turn in range(outbox.MAX_ATTEMPTS):
            assert client.get(path).json()["state"] == "queued"
            with _after(1_000 * turn):
                assert outbox.deliver_waiting() == 1
    shown = client.get(path).json()
    assert shown["state"] == "failed"
    assert [reason["code"] for reason in shown["reasons"]] == ["planning_given_up"]
    assert live_lab.counts() == before
    procedure = Procedure.objects.get()
    assert (procedure.attempt, procedure.broken_off) == (outbox.MAX_ATTEMPTS, 0)
    [dead] = outbox.list_dead()
    assert dead.last_error == "OSError: no space left on device"

    assert outbox.send_again(dead.pk) is True
    assert outbox.send_again(dead.pk) is False
    assert client.get(path).json()["state"] == "queued"
    assert outbox.deliver_waiting() == 1
    assert client.get(path).json()["state"] == "planned"


def test_what_must_follow_on_giving_up_is_tried_again_when_it_fails(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    failing = [True]

    def fails(payload: dict[str, Any], message_id: int) -> None:
        raise ValueError("it does not work")

    def follow(payload: dict[str, Any], reason: str) -> None:
        if failing:
            raise RuntimeError("not now")

    topic = topics.Topic(fails, outbox.DOCUMENTS, 60, when_given_up=follow)
    monkeypatch.setitem(topics._topics, TOPIC, topic)
    number = outbox.enqueue(TOPIC, {})
    OutboxMessage.objects.update(attempts=outbox.MAX_ATTEMPTS - 1)
    outbox.deliver_waiting()
    message = OutboxMessage.objects.get()
    assert (message.state, message.last_error) == ("sent", "ValueError: it does not work")
    failing.clear()
    with _after(outbox.lease().total_seconds()):
        assert outbox.deliver_waiting() == 0
    message.refresh_from_db()
    assert (message.pk, message.state) == (number, "dead")


def _outbox(*arguments: str) -> str:
    said = StringIO()
    call_command("outbox", *arguments, stdout=said)
    return said.getvalue()


def test_the_operator_sees_dead_letters_and_sends_them_again(runs: list[int]) -> None:
    number = outbox.enqueue(TOPIC, {"what": 7})
    assert "No dead letters" in _outbox("dead")
    OutboxMessage.objects.update(state="dead", attempts=8, last_error="ValueError: broken")
    listed = _outbox("dead")
    assert f"{number}  {TOPIC} {json.dumps({'what': 7})}" in listed
    assert "ValueError: broken" in listed
    assert "documents     dead       1" in _outbox("status")
    for arguments, words in (
        (["send-again"], "Name the messages"), (["send-again", "999"], "999 is no dead letter"),
    ):  # fmt: skip
        with pytest.raises(CommandError, match=words):
            _outbox(*arguments)
    assert OutboxMessage.objects.get().state == "dead"
    assert _outbox("send-again", "--all") == f"{number} is sent again.\n"
    assert outbox.deliver_waiting() == 1
    assert runs == [number]
    assert _outbox("pause", "--reason", "a look first").startswith("Paused")
    assert "PAUSED since 2026-12-01 12:00 UTC: a look first" in _outbox("status")
    assert _outbox("resume") == "Sending again.\n"
