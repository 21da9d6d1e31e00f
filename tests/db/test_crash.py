"""A process that dies while it plans: another one takes over, and nothing is held twice."""

import json
import os
import signal
import subprocess
import sys
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from pathlib import Path

import pytest

from inventory.models import Hold, Movement, Reservation
from inventory.services.verify import verify_ledger
from labplan.base import clock, outbox
from labplan.base.models import OutboxMessage
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services import ProcedureOrder, planning, request_procedure
from tests.db.bench import database_address
from tests.laboratory import OCTYL_GLUCOSIDE, Laboratory

LEASE = timedelta(seconds=outbox.limit_s("procedure.plan") + outbox.GRACE_S)
NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)
ROOT = Path(__file__).resolve().parents[2]
# A relay like any other, but for the function in which it is killed.
RELAY = """
import os, signal, sys
from datetime import datetime
import django
django.setup()
from labplan.base import clock, outbox
from labplan.procedures.services import planning
def die(*args, **kwargs):
    print("reached", flush=True)
    os.kill(os.getpid(), signal.SIGKILL)
setattr(planning, sys.argv[2], die)
with clock.replaced_by(clock.standing_at(datetime.fromisoformat(sys.argv[1]))):
    outbox.deliver_waiting()
"""
# between plan and settle; in the transaction that settles, after the holds are written
PLACES = ("settle_plan", "_close")


def _relay_killed_in(place: str, instant: datetime) -> None:
    environment = {
        **os.environ,
        "DATABASE_URL": database_address(),
        "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }
    ended = subprocess.run(
        [sys.executable, "-c", RELAY, instant.isoformat(), place],
        cwd=ROOT, env=environment, capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert ended.returncode == -signal.SIGKILL, ended.stderr
    assert ended.stdout == "reached\n"


def _request(lab: Laboratory) -> Procedure:
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(2000))
    return request_procedure(actor=lab.actor(), order=order)


def _deliver_at(instant: datetime) -> int:
    with clock.replaced_by(clock.standing_at(instant)):
        return outbox.deliver_waiting()


@pytest.mark.parametrize("place", PLACES)
def test_a_killed_attempt_is_taken_up_by_the_next_relay(live_lab: Laboratory, place: str) -> None:
    procedure, before = _request(live_lab), live_lab.counts()
    _relay_killed_in(place, NOON)
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("queued", 1)
    assert live_lab.counts() == before
    assert OutboxMessage.objects.get().state == "sent"

    assert _deliver_at(NOON + LEASE - timedelta(seconds=1)) == 0
    assert _deliver_at(NOON + LEASE) == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("planned", 2)
    reservation = Reservation.objects.get(purpose=f"procedure {procedure.code}")
    assert reservation.code == procedure.reservation_code
    document = Document.objects.get()
    assert (document.attempt, document.pk) == (2, procedure.document_id)
    body = json.loads(bytes(document.body))
    charges = [c for stage in body["route"]["stages"] for c in stage["charges"] if c["bottle"]]
    assert reservation.holds.count() == len(charges)
    made = Movement.objects.filter(reason=f"procedure {procedure.code}")
    assert made.count() == len(charges)
    assert OutboxMessage.objects.get().state == "done"
    assert verify_ledger().faults == ()


def test_a_procedure_that_kills_its_process_twice_is_failed(live_lab: Laboratory) -> None:
    procedure, before = _request(live_lab), live_lab.counts()
    _relay_killed_in("settle_plan", NOON)
    _relay_killed_in("_close", NOON + LEASE)
    procedure.refresh_from_db()
    assert (procedure.state, procedure.attempt) == ("queued", planning.MAX_BROKEN_OFF)
    assert _deliver_at(NOON + 2 * LEASE) == 1
    procedure.refresh_from_db()
    assert procedure.state == "failed"
    [reason] = json.loads(procedure.reasons)
    assert reason["code"] == "engine_crashed"
    assert (procedure.reservation_code, procedure.document_id) == (None, None)
    assert live_lab.counts() == before
    assert OutboxMessage.objects.get().state == "done"
    assert _deliver_at(NOON + 10 * LEASE) == 0


def test_an_attempt_that_comes_back_late_settles_nothing(live_lab: Laboratory) -> None:
    procedure = _request(live_lab)
    message = OutboxMessage.objects.get()
    old = planning.begin_attempt(procedure.pk, message.pk)
    new = planning.begin_attempt(procedure.pk, message.pk)
    assert old is not None
    assert new is not None
    assert (old.number, new.number) == (1, 2)
    before = live_lab.counts()
    planning.settle_plan(old, planning.compute_plan(old))
    procedure.refresh_from_db()
    assert procedure.state == "queued"
    assert live_lab.counts() == before

    planning.settle_plan(new, planning.compute_plan(new))
    procedure.refresh_from_db()
    assert (procedure.state, Document.objects.get().attempt) == ("planned", 2)
    after = live_lab.counts()
    planning.settle_plan(old, planning.compute_plan(old))
    planning._settle_bare(old, "failed", "late", "an old attempt gives up")
    procedure.refresh_from_db()
    assert procedure.state == "planned"
    assert live_lab.counts() == after
    assert Hold.objects.filter(reservation__code=procedure.reservation_code).count() == (
        Movement.objects.filter(reason=f"procedure {procedure.code}").count()
    )


def test_a_message_delivered_again_after_the_end_changes_nothing(live_lab: Laboratory) -> None:
    procedure = _request(live_lab)
    message = OutboxMessage.objects.get()
    assert live_lab.run_outbox() == 1
    procedure.refresh_from_db()
    settled, after = procedure.version, live_lab.counts()
    planning.plan_procedure(procedure_id=procedure.pk, message_id=message.pk)
    procedure.refresh_from_db()
    assert (procedure.state, procedure.version, procedure.attempt) == ("planned", settled, 1)
    assert live_lab.counts() == after


def test_a_procedure_that_eats_all_memory_is_tried_twice(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    def eats(attempt: planning.Attempt) -> None:
        raise MemoryError

    monkeypatch.setattr(planning, "compute_plan", eats)
    procedure, before = _request(live_lab), live_lab.counts()
    for hour in range(planning.MAX_BROKEN_OFF + 1):
        procedure.refresh_from_db()
        assert procedure.state == "queued"
        assert _deliver_at(NOON + timedelta(hours=hour)) == 1
    procedure.refresh_from_db()
    assert procedure.state == "failed"
    assert [reason["code"] for reason in json.loads(procedure.reasons)] == ["engine_crashed"]
    assert live_lab.counts() == before


def test_errors_that_are_no_crash_may_come_as_often_as_they_like(
    live_lab: Laboratory, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fails(attempt: planning.Attempt) -> None:
        raise OSError("the disk is full")

    procedure = _request(live_lab)
    with monkeypatch.context() as patch:
        patch.setattr(planning, "compute_plan", fails)
        for hour in range(planning.MAX_BROKEN_OFF + 2):
            assert _deliver_at(NOON + timedelta(hours=hour)) == 1
    procedure.refresh_from_db()
    assert (procedure.state, procedure.broken_off, procedure.phase) == ("queued", 0, "waiting")
    assert _deliver_at(NOON + timedelta(days=1)) == 1
    procedure.refresh_from_db()
    assert procedure.state == "planned"
