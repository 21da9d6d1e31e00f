"""What is old and done goes; what may still be asked for stays."""

from datetime import UTC, datetime, timedelta

import pytest

from labplan.base import clock, housekeeping
from labplan.base.models import OutboxMessage, RememberedAnswer
from labplan.base.sweeps import ANSWERS_KEPT, CHUNK, MESSAGES_KEPT, clear_messages, forget_answers
from tests.laboratory import PROCEDURES, Laboratory, octyl_order

NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)


def test_an_answer_is_remembered_for_seven_days_and_then_forgotten(lab: Laboratory) -> None:
    client = lab.client()
    first = client.post(PROCEDURES, octyl_order(), key="a-week-old-key")
    with clock.replaced_by(clock.standing_at(NOON + ANSWERS_KEPT)):
        assert forget_answers() == 0
        again = client.post(PROCEDURES, octyl_order(), key="a-week-old-key")
        assert again["Location"] == first["Location"]
    with clock.replaced_by(clock.standing_at(NOON + ANSWERS_KEPT + timedelta(seconds=1))):
        assert forget_answers() == 1
        assert RememberedAnswer.objects.count() == 0
        anew = client.post(PROCEDURES, octyl_order(), key="a-week-old-key")
        assert anew.status_code == 202
        assert anew["Location"] != first["Location"]


@pytest.mark.django_db
def test_messages_that_are_long_done_are_cleared_in_pieces_and_others_stay() -> None:
    OutboxMessage.objects.bulk_create(
        OutboxMessage(
            topic="t", queue="q", payload="{}", state=state, created_at=NOON, available_at=NOON,
            done_at=done_at,
        )
        for state, done_at, number in (
            ("done", NOON, CHUNK + 3), ("done", NOON + timedelta(days=1), 2), ("dead", None, 1),
            ("new", None, 1), ("sent", None, 1),
        )
        for _ in range(number)
    )  # fmt: skip
    with clock.replaced_by(clock.standing_at(NOON + MESSAGES_KEPT + timedelta(hours=1))):
        assert clear_messages() == CHUNK + 3
        assert clear_messages() == 0
    left = OutboxMessage.objects.order_by("pk").values_list("state", flat=True)
    assert list(left) == ["done", "done", "dead", "new", "sent"]


def test_the_scheduler_knows_these_sweeps() -> None:
    assert {"base.forget_answers", "base.clear_messages"} <= set(housekeeping.duties())
