"""Holds that nobody uses in time go back by themselves, once, with a line in the book."""

from datetime import UTC, datetime, timedelta
from decimal import Decimal

import pytest
from django.db import transaction

from inventory.models import Hold, Movement, Reservation
from inventory.services import lapse_reservation
from labplan.base import clock, housekeeping
from labplan.base.models import Event
from labplan.procedures.models import Procedure
from labplan.procedures.services import ProcedureOrder, lapse_overdue, request_procedure
from labplan.procedures.services.planning import HOLD_DAYS
from tests.db.bench import at_once, make_shelf, whole_stock
from tests.laboratory import OCTYL_GLUCOSIDE, Laboratory

# The laboratory of the tests is in Berlin: the last day ends an hour before midnight in UTC.
LAST_EVENING = datetime(2026, 12, 1, 22, 59, tzinfo=UTC) + timedelta(days=HOLD_DAYS)
NEXT_MORNING = LAST_EVENING + timedelta(minutes=1)


def _planned(lab: Laboratory) -> Procedure:
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(2000))
    procedure = request_procedure(actor=lab.actor(), order=order)
    lab.run_outbox()
    procedure.refresh_from_db()
    assert procedure.state == "planned"
    return procedure


def _sweep_at(instant: datetime) -> int:
    with clock.replaced_by(clock.standing_at(instant)):
        return lapse_overdue()


def test_a_hold_lasts_to_the_end_of_its_last_day_and_then_lapses_once(live_lab: Laboratory) -> None:
    free = live_lab.bottle("GPA-1").balance
    procedure = _planned(live_lab)
    before = whole_stock()
    assert _sweep_at(LAST_EVENING) == 0
    assert whole_stock() == before

    # the holds of the demo's other people end on the same day
    others = Reservation.objects.exclude(code=procedure.reservation_code).count()
    assert _sweep_at(NEXT_MORNING) == 1 + others
    procedure.refresh_from_db()
    assert (procedure.state, procedure.version) == ("lapsed", 3)
    reservation = Reservation.objects.get(code=procedure.reservation_code)
    assert reservation.state == "closed"
    holds = list(reservation.holds.all())
    assert {hold.state for hold in holds} == {Hold.State.LAPSED}
    assert [hold.given_back for hold in holds] == [hold.amount for hold in holds]
    lines = Movement.objects.filter(kind="lapse", hold__reservation=reservation)
    assert lines.count() == len(holds)
    assert {(line.actor_code, line.reason) for line in lines} == {
        ("LABPLAN", f"{procedure.code} not approved in time")
    }
    assert live_lab.bottle("GPA-1").balance.held == free.held
    [event] = Event.objects.filter(kind="procedure.lapsed")
    assert event.subject == f"procedure {procedure.code}"
    after = whole_stock()
    assert _sweep_at(NEXT_MORNING) == 0
    assert whole_stock() == after


@pytest.mark.parametrize("state", ["approved", "running"])
def test_what_is_approved_or_running_keeps_its_holds(live_lab: Laboratory, state: str) -> None:
    procedure = _planned(live_lab)
    Procedure.objects.filter(pk=procedure.pk).update(state=state)
    held = live_lab.bottle("GPA-1").balance.held
    _sweep_at(NEXT_MORNING)
    procedure.refresh_from_db()
    assert procedure.state == state
    assert live_lab.bottle("GPA-1").balance.held == held
    assert Reservation.objects.get(code=procedure.reservation_code).state == "open"


@pytest.mark.django_db(transaction=True)
def test_a_reservation_that_was_extended_meanwhile_stays() -> None:
    shelf = make_shelf(A=100_000)
    reservation = shelf.hold(("A", 5_000))
    Reservation.objects.update(expires_on=clock.today())
    before = whole_stock()
    with transaction.atomic():
        assert lapse_reservation(code=reservation.code, reason="late") is False
    assert whole_stock() == before


@pytest.mark.django_db(transaction=True)
def test_two_sweeps_at_once_give_back_once() -> None:
    shelf = make_shelf(A=100_000)
    for _ in range(4):
        shelf.hold(("A", 5_000))
    with clock.replaced_by(clock.standing_at(NEXT_MORNING)):
        found = at_once(lapse_overdue, lapse_overdue)
    assert sum(found) == 4
    assert shelf.balance("A") == (100_000, 0, 9)


def test_the_scheduler_knows_the_sweep() -> None:
    duty = housekeeping.duties()["procedures.lapse_overdue"]
    assert duty.every == timedelta(minutes=5)
