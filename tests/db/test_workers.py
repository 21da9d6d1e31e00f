"""Procedures planned by real prefork workers, and what dies on the way."""

import json
import os
import signal
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from decimal import Decimal

import pytest
from celery import Celery

from inventory.models import Hold, Reservation
from labplan.base import clock, tracing
from labplan.base.models import OutboxMessage
from labplan.celery import app as labplan_celery
from labplan.procedures.models import Procedure
from labplan.procedures.services import ProcedureOrder, request_procedure
from labplan.procedures.services.planning import MAX_BROKEN_OFF
from tests.laboratory import OCTYL_GLUCOSIDE, Laboratory
from tests.services.live_work import LiveWork, is_alive, live_work
from tests.targets import CRASHING, HANGING

NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)


@pytest.fixture
def work(live_lab: Laboratory) -> Iterator[LiveWork]:
    with live_work(NOON) as running:
        yield running


def ask(lab: Laboratory, smiles: str = OCTYL_GLUCOSIDE) -> Procedure:
    order = ProcedureOrder("LECTIN-07", smiles, product_mass_mg=Decimal(100))
    return request_procedure(actor=lab.actor(), order=order)


def ended(*procedures: Procedure) -> bool:
    wanted = [procedure.pk for procedure in procedures]
    return not Procedure.objects.filter(pk__in=wanted, state="queued").exists()


def reason_of(procedure: Procedure) -> str:
    procedure.refresh_from_db()
    assert procedure.state == "failed"
    [reason] = json.loads(procedure.reasons)
    return str(reason["code"])


def test_workers_plan_what_was_requested_and_hold_it_once(
    live_lab: Laboratory, work: LiveWork
) -> None:
    with tracing.working_on("request-7"):
        asked = [ask(live_lab) for _ in range(6)]
    work.until(lambda: ended(*asked))
    assert set(Procedure.objects.values_list("state", "attempt", "phase")) == {
        ("planned", 1, "ended")
    }
    assert set(OutboxMessage.objects.values_list("state", "sends", "attempts", "request_id")) == {
        ("done", 1, 1, "request-7")
    }
    codes = Procedure.objects.values_list("reservation_code", flat=True)
    assert Hold.objects.filter(reservation__code__in=codes).count() == 6 * (
        Hold.objects.filter(reservation__code=codes[0]).count()
    )


@pytest.mark.parametrize("fatal", [CRASHING, HANGING], ids=["crashes", "hangs"])
def test_a_structure_that_ends_its_process_is_tried_twice_and_the_next_runs(
    live_lab: Laboratory, work: LiveWork, fatal: str
) -> None:
    first = ask(live_lab)
    work.until(lambda: ended(first))
    children = work.children("worker")
    assert len(children) == 2
    before = live_lab.counts()
    bad, after = ask(live_lab, fatal), ask(live_lab)
    work.until(lambda: ended(bad, after))
    assert reason_of(bad) == "engine_crashed"
    assert (bad.attempt, bad.broken_off) == (MAX_BROKEN_OFF, MAX_BROKEN_OFF)
    assert (bad.reservation_code, bad.document_id) == (None, None)
    after.refresh_from_db()
    assert (after.state, after.attempt) == ("planned", 1)
    assert live_lab.counts()[:3] == (before[0] + 2, before[1] + 1, before[2] + 1)
    # each of the two runs cost the child it ran in, and nothing else
    work.until(lambda: len(work.children("worker")) == 2)
    assert is_alive(work.pid("worker"))
    assert 1 <= len([pid for pid in children if not is_alive(pid)]) <= 2


def test_what_the_broker_forgets_is_sent_again(live_lab: Laboratory, work: LiveWork) -> None:
    warm = ask(live_lab)
    work.until(lambda: ended(warm))
    os.kill(work.pid("worker"), signal.SIGSTOP)
    # One of them the stopped worker has asked for already; the others lie in the broker.
    asked = [ask(live_lab) for _ in range(3)]
    work.until(lambda: OutboxMessage.objects.filter(state="sent").count() == 3)
    work.broker.stop()
    work.broker.start()
    os.kill(work.pid("worker"), signal.SIGCONT)
    work.until(lambda: ended(*asked))
    sent = OutboxMessage.objects.order_by("pk").values_list("state", "sends")[1:]
    assert {state for state, _ in sent} == {"done"}
    assert len([sends for _, sends in sent if sends >= 2]) >= 2
    for procedure in asked:
        procedure.refresh_from_db()
        assert procedure.state == "planned"
        assert Reservation.objects.filter(purpose=f"procedure {procedure.code}").count() == 1


def test_the_children_of_a_killed_worker_die_with_it(live_lab: Laboratory, work: LiveWork) -> None:
    first = ask(live_lab)
    work.until(lambda: ended(first))
    parent, children = work.pid("worker"), work.children("worker")
    assert len(children) == 2
    os.kill(parent, signal.SIGKILL)
    work.until(lambda: not any(is_alive(pid) for pid in [parent, *children]))
    second = ask(live_lab)
    work.until(lambda: ended(second))
    second.refresh_from_db()
    assert second.state == "planned"


def test_a_queued_procedure_is_cancelled_before_a_worker_takes_it(
    live_lab: Laboratory, work: LiveWork
) -> None:
    warm = ask(live_lab)
    work.until(lambda: ended(warm))
    os.kill(work.pid("worker"), signal.SIGSTOP)
    client = live_lab.client()
    asked = ask(live_lab)
    path = f"/api/v1/procedures/{asked.code}/"
    answer = client.post(f"{path}cancel/", If_Match=client.get(path)["ETag"])
    assert answer.json()["state"] == "cancelled"
    os.kill(work.pid("worker"), signal.SIGCONT)
    work.until(lambda: not OutboxMessage.objects.exclude(state="done").exists())
    asked.refresh_from_db()
    assert (asked.state, asked.attempt) == ("cancelled", 0)


def test_a_sweep_that_the_scheduler_sends_is_run_by_a_worker(
    live_lab: Laboratory, work: LiveWork
) -> None:
    first = ask(live_lab)
    work.until(lambda: ended(first))
    yesterday = clock.today() - timedelta(days=1)
    Reservation.objects.update(expires_on=yesterday)
    scheduler = Celery(broker=work.broker.address)
    entry = {**labplan_celery.conf.beat_schedule}["procedures.lapse_overdue"]
    scheduler.send_task(entry["task"], args=entry["args"], queue=entry["options"]["queue"])
    work.until(lambda: not Reservation.objects.filter(state="open").exists())
    first.refresh_from_db()
    assert first.state == "lapsed"
