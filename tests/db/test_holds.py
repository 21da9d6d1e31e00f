"""Holds: all lines or none, the heel kept back, every change in the book."""

import uuid
from datetime import UTC, date, datetime
from decimal import Decimal
from typing import Any

import pytest
from django.db import IntegrityError, transaction

from inventory.errors import StockShort
from inventory.models import Bottle, Hold, Movement
from inventory.services import HoldLine, hold_lines, receive_bottles, release_reservation
from labplan.base.errors import NotAllowed, NotFound, StateForbids
from tests.db.bench import HEEL_UG, Shelf, make_shelf, whole_stock

pytestmark = pytest.mark.django_db
USABLE_UG = 100_000 - HEEL_UG


@pytest.fixture
def shelf() -> Shelf:
    return make_shelf(A=100_000, B=100_000, C=100_000)


def _release(shelf: Shelf, code: uuid.UUID, role: str = "chemist") -> None:
    with transaction.atomic():
        release_reservation(actor=shelf.actor(role), code=code, reason="not needed")


def _shortfalls(error: StockShort) -> list[dict[str, Any]]:
    return [shortfall.as_dict() for shortfall in error.shortfalls]


def test_a_hold_lowers_what_is_free_and_leaves_what_is_there(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    assert shelf.balance("A") == (100_000, 30_000, 2)
    assert shelf.balance("B") == (100_000, 0, 1)
    hold = reservation.holds.get()
    assert (hold.line, hold.amount, hold.used, hold.given_back) == (1, 30_000, 0, 0)
    assert (hold.state, reservation.state, reservation.version) == ("open", "open", 1)
    assert reservation.expires_on == date(2026, 12, 15)


def test_the_movement_says_what_was_asked_for_and_by_whom(shelf: Shelf) -> None:
    line = HoldLine("A", 12_345, "12.345", "mg", Decimal("1.2340"), 67)
    with transaction.atomic():
        reservation = hold_lines(
            actor=shelf.actor(), project_id=shelf.project.pk, purpose="procedure P-1",
            expires_on=date(2026, 12, 15), lines=[line],
        )  # fmt: skip
    written = Movement.objects.get(kind="hold")
    assert (written.entered_amount, written.entered_unit) == ("12.345", "mg")
    assert (written.density_g_per_ml, written.amount_nmol) == (Decimal("1.2340"), 67)
    assert (written.on_hand_change, written.held_change) == (0, 12_345)
    assert (written.on_hand_after, written.held_after, written.seq) == (100_000, 12_345, 2)
    assert (written.actor_code, written.reason) == ("CHEMIST", "procedure P-1")
    assert (written.project_id, written.hold_id) == (shelf.project.pk, reservation.holds.get().pk)
    assert written.booked_on == date(2026, 12, 1)
    assert written.recorded_at == datetime(2026, 12, 1, 12, tzinfo=UTC)


def test_the_heel_stays_in_the_bottle(shelf: Shelf) -> None:
    assert shelf.bottle("A").heel == HEEL_UG
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        shelf.hold(("A", USABLE_UG + 1))
    assert whole_stock() == before
    assert _shortfalls(refused.value) == [
        {"line": 1, "bottle": "A", "needed": USABLE_UG + 1, "usable": USABLE_UG}
    ]
    shelf.hold(("A", USABLE_UG))
    assert shelf.balance("A") == (100_000, USABLE_UG, 2)
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        shelf.hold(("A", 1))
    assert _shortfalls(refused.value) == [{"line": 1, "bottle": "A", "needed": 1, "usable": 0}]
    assert whole_stock() == before


def test_one_short_bottle_stops_all_and_every_short_one_is_listed(shelf: Shelf) -> None:
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        shelf.hold(("C", 90_000), ("B", 10_000), ("A", 80_001))
    assert whole_stock() == before
    assert _shortfalls(refused.value) == [
        {"line": 1, "bottle": "C", "needed": 90_000, "usable": USABLE_UG},
        {"line": 3, "bottle": "A", "needed": 80_001, "usable": USABLE_UG},
    ]
    assert "A, C" in refused.value.detail
    assert "B" not in refused.value.detail.split(":")[0]


def test_two_lines_on_one_bottle_are_added_up(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000), ("B", 1), ("A", 20_000))
    assert shelf.balance("A") == (100_000, 50_000, 3)
    lines = Movement.objects.filter(bottle__code="A").order_by("seq")
    assert list(lines.values_list("seq", "held_change", "held_after")) == [
        (1, 0, 0),
        (2, 30_000, 30_000),
        (3, 20_000, 50_000),
    ]
    assert list(reservation.holds.order_by("line").values_list("line", "amount")) == [
        (1, 30_000),
        (2, 1),
        (3, 20_000),
    ]


def test_two_lines_that_fit_one_by_one_but_not_together_are_refused(shelf: Shelf) -> None:
    """60 + 30 is 90, and 80 can be used."""
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        shelf.hold(("A", 60_000), ("A", 30_000))
    assert whole_stock() == before
    assert _shortfalls(refused.value) == [
        {"line": 1, "bottle": "A", "needed": 90_000, "usable": USABLE_UG}
    ]


@pytest.mark.django_db(transaction=True)
def test_outside_a_transaction_nothing_is_held_released_or_received() -> None:
    shelf = make_shelf(A=100_000)
    reservation = shelf.hold(("A", 1_000))
    before = whole_stock()
    with pytest.raises(RuntimeError, match="inside the caller's transaction"):
        shelf.hold_here(("A", 1_000))
    with pytest.raises(RuntimeError, match="inside the caller's transaction"):
        release_reservation(actor=shelf.actor(), code=reservation.code, reason="test")
    with pytest.raises(RuntimeError, match="inside the caller's transaction"):
        receive_bottles([], actor=shelf.actor("stock_keeper"), reason="test")
    assert whole_stock() == before


@pytest.mark.parametrize("status", ["quarantined", "disposed"])
def test_a_bottle_set_aside_from_use_is_not_held(shelf: Shelf, status: str) -> None:
    Bottle.objects.filter(code="B").update(status=status)
    before = whole_stock()
    with pytest.raises(StockShort, match="Set aside from use: B") as refused:
        shelf.hold(("A", 1_000), ("B", 1_000))
    assert whole_stock() == before
    assert _shortfalls(refused.value) == [{"line": 2, "bottle": "B", "needed": 1_000, "usable": 0}]


def test_an_unknown_bottle_is_named(shelf: Shelf) -> None:
    before = whole_stock()
    with pytest.raises(NotFound, match="no bottle X-1, X-2"):
        shelf.hold(("X-2", 1), ("A", 1_000), ("X-1", 1))
    assert whole_stock() == before


@pytest.mark.parametrize("role", ["viewer", "approver", "stock_keeper"])
def test_who_may_not_request_may_not_hold(shelf: Shelf, role: str) -> None:
    before = whole_stock()
    with pytest.raises(NotAllowed, match="chemist, lead"):
        shelf.hold(("A", 1_000), role=role)
    assert whole_stock() == before


def test_a_release_gives_back_everything_and_closes_the_reservation(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000), ("B", 5_000), ("A", 1_000))
    _release(shelf, reservation.code)
    assert shelf.balance("A") == (100_000, 0, 5)
    assert shelf.balance("B") == (100_000, 0, 3)
    holds = reservation.holds.order_by("line").values_list("amount", "used", "given_back", "state")
    assert list(holds) == [
        (30_000, 0, 30_000, "released"),
        (5_000, 0, 5_000, "released"),
        (1_000, 0, 1_000, "released"),
    ]
    reservation.refresh_from_db()
    assert (reservation.state, reservation.version) == ("closed", 2)
    given = Movement.objects.filter(kind="release").order_by("bottle__code", "seq")
    entered = given.values_list("entered_amount", "entered_unit")
    assert list(entered) == [("30", "mg"), ("1", "mg"), ("5", "mg")]
    assert list(given.values_list("bottle__code", "held_change", "held_after")) == [
        ("A", -30_000, 1_000),
        ("A", -1_000, 0),
        ("B", -5_000, 0),
    ]
    assert len(set(given.values_list("operation", flat=True))) == 1


def test_a_second_release_is_refused(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    _release(shelf, reservation.code)
    before = whole_stock()
    with pytest.raises(StateForbids, match="closed"):
        _release(shelf, reservation.code)
    assert whole_stock() == before


def test_who_may_not_release_leaves_it_held(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    before = whole_stock()
    with pytest.raises(NotAllowed):
        _release(shelf, reservation.code, role="viewer")
    with pytest.raises(NotFound):
        _release(shelf, uuid.uuid4())
    assert whole_stock() == before
    _release(shelf, reservation.code, role="stock_keeper")
    assert shelf.balance("A") == (100_000, 0, 3)


def test_two_releases_in_one_transaction_undo_each_other(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))

    def twice() -> None:
        release_reservation(actor=shelf.actor(), code=reservation.code, reason="first")
        release_reservation(actor=shelf.actor(), code=reservation.code, reason="second")

    with pytest.raises(StateForbids), transaction.atomic():
        twice()
    assert shelf.balance("A") == (100_000, 30_000, 2)
    assert Hold.objects.get().state == "open"


def test_lines_are_numbered_without_gaps_over_many_operations(shelf: Shelf) -> None:
    first = shelf.hold(("A", 10_000), ("B", 1_000))
    shelf.hold(("A", 20_000), ("A", 5_000))
    with pytest.raises(StockShort):
        shelf.hold(("A", 79_000))
    _release(shelf, first.code)
    shelf.hold(("B", 2_000))
    book = Movement.objects.filter(bottle__code="A").order_by("seq")
    assert list(book.values_list("seq", "kind", "held_change", "held_after")) == [
        (1, "receipt", 0, 0),
        (2, "hold", 10_000, 10_000),
        (3, "hold", 20_000, 30_000),
        (4, "hold", 5_000, 35_000),
        (5, "release", -10_000, 25_000),
    ]
    book = Movement.objects.filter(bottle__code="B").order_by("seq")
    assert list(book.values_list("seq", "kind", "held_after")) == [
        (1, "receipt", 0),
        (2, "hold", 1_000),
        (3, "release", 0),
        (4, "hold", 2_000),
    ]
    operations = Movement.objects.filter(kind="hold").values_list("operation", "reason")
    assert len(set(operations)) == 3


@pytest.mark.parametrize("amount", [0, -5])
def test_nothing_or_less_cannot_be_held(shelf: Shelf, amount: int) -> None:
    before = whole_stock()
    with pytest.raises(IntegrityError, match="hold_amount_whole"):
        shelf.hold(("A", amount))
    assert whole_stock() == before


def test_a_hold_without_lines_changes_no_balance(shelf: Shelf) -> None:
    shelf.hold()
    assert [shelf.balance(code) for code in "ABC"] == [(100_000, 0, 1)] * 3
    assert Movement.objects.count() == 3
