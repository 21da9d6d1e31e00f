"""Facts win: recorded whatever was promised, holds cancelled by the stated rule, people told."""

import json
import uuid
from datetime import date, timedelta
from decimal import Decimal

import pytest
from django.db import transaction

from inventory.models import Bottle, Hold, Movement, Notice, Reservation
from inventory.quantities import Asked
from inventory.services import (
    Actual,
    MovementOrder,
    ReadingOrder,
    make_firm,
    move_bottle,
    record_reading,
    set_bottle_status,
    use_reservation,
)
from inventory.services.verify import verify_ledger
from labplan.base import clock
from labplan.base.errors import InvalidValue, NotAllowed, NotFound, StateForbids
from labplan.base.models import OutboxMessage, Project
from tests.db.bench import Shelf, make_shelf, whole_stock

pytestmark = pytest.mark.django_db


@pytest.fixture
def shelf() -> Shelf:
    return make_shelf(A=100_000, B=100_000)


def mg(value: str) -> Asked:
    return Asked("mass_mg", Decimal(value))


def use(shelf: Shelf, reservation: Reservation, value: str, **more: object) -> int:
    """One line used; how many holds of others were cancelled."""
    return use_reservation(
        actor=shelf.actor(), code=reservation.code, actuals=[Actual(1, mg(value), **more)],
    ).cancelled_holds  # fmt: skip


def holds_of(reservation: Reservation) -> list[tuple[int, int, int, str]]:
    rows = Hold.objects.filter(reservation=reservation).order_by("line")
    return list(rows.values_list("amount", "used", "given_back", "state"))


def book(code: str, first: int = 2) -> list[tuple[str, int, int]]:
    rows = Movement.objects.filter(bottle__code=code, seq__gte=first).order_by("seq")
    return list(rows.values_list("kind", "on_hand_change", "held_change"))


def later(minutes: int) -> object:
    return clock.replaced_by(clock.standing_at(clock.now() + timedelta(minutes=minutes)))


def test_less_than_held_gives_the_rest_back_and_closes(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    assert use(shelf, reservation, "12.345") == 0
    assert book("A") == [("hold", 0, 30_000), ("release", 0, -17_655), ("use", -12_345, -12_345)]
    assert holds_of(reservation) == [(30_000, 12_345, 17_655, "used")]
    assert shelf.balance("A") == (87_655, 0, 4)
    reservation.refresh_from_db()
    assert (reservation.state, reservation.version) == ("closed", 2)
    line = Movement.objects.get(kind="use")
    assert (line.entered_amount, line.entered_unit, line.actor_code) == ("12.345", "mg", "CHEMIST")
    assert line.project_id == shelf.project.pk
    assert shelf.bottle("A").opened_on == date(2026, 12, 1)


def test_a_part_leaves_the_hold_open(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    assert use(shelf, reservation, "10", closes=False) == 0
    assert holds_of(reservation) == [(30_000, 10_000, 0, "open")]
    assert shelf.balance("A") == (90_000, 20_000, 3)
    assert use(shelf, reservation, "20", closes=False) == 0
    assert holds_of(reservation) == [(30_000, 30_000, 0, "used")]
    reservation.refresh_from_db()
    assert (reservation.state, reservation.version) == ("closed", 3)


def test_more_than_held_comes_from_free_stock(shelf: Shelf) -> None:
    reservation, other = shelf.hold(("A", 30_000)), shelf.hold(("A", 40_000))
    assert use(shelf, reservation, "60") == 0
    assert book("A", 4) == [("use", -60_000, -30_000)]
    assert shelf.balance("A") == (40_000, 40_000, 4)
    assert holds_of(other) == [(40_000, 0, 0, "open")]


def test_more_than_is_free_cancels_the_latest_unapproved_hold_first(shelf: Shelf) -> None:
    mine = shelf.hold(("A", 10_000))
    with later(1):
        firm = shelf.hold(("A", 20_000))
    with later(2):
        early = shelf.hold(("A", 20_000))
    with later(3):
        late = shelf.hold(("A", 20_000), ("B", 5_000))
    make_firm(actor=shelf.actor("approver"), code=firm.code, expires_on=date(2026, 12, 20))
    assert use(shelf, mine, "41") == 1  # 59 are left, 60 were held by others
    assert holds_of(late) == [(20_000, 0, 20_000, "cancelled"), (5_000, 0, 0, "open")]
    assert holds_of(early) == [(20_000, 0, 0, "open")]
    assert shelf.balance("A") == (59_000, 40_000, 7)
    assert use(shelf, mine, "58.5") == 2  # whatever state its hold has; all but 0.5 mg is gone
    assert holds_of(early) == [(20_000, 0, 20_000, "cancelled")]
    assert holds_of(firm) == [(20_000, 0, 20_000, "cancelled")]
    assert shelf.balance("A") == (500, 0, 10)
    assert [h["bottle"] for h in messages()] == ["A", "A", "A"]
    late.refresh_from_db()
    assert late.state == "open"  # what it holds of B stays
    firm.refresh_from_db()
    assert firm.state == "closed"


def messages() -> list[dict[str, str]]:
    rows = OutboxMessage.objects.filter(topic="stock.holds_cancelled").order_by("pk")
    return [hold for row in rows for hold in json.loads(row.payload)["holds"]]


def test_a_firm_hold_outlives_an_older_one_that_nobody_approved(shelf: Shelf) -> None:
    early = shelf.hold(("A", 40_000))
    with later(1):
        firm = shelf.hold(("A", 40_000))
    make_firm(actor=shelf.actor("lead"), code=firm.code, expires_on=date(2026, 12, 20))
    spill = MovementOrder("loss", mg("50"), "spilt")
    moved = move_bottle(actor=shelf.actor(), bottle_code="A", order=spill)
    assert moved.cancelled_holds == 1
    assert holds_of(early) == [(40_000, 0, 40_000, "cancelled")]
    assert holds_of(firm) == [(40_000, 0, 0, "open")]
    assert book("A", 4) == [("release", 0, -40_000), ("loss", -50_000, 0)]


def test_more_than_the_book_says_corrects_the_book(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    assert use(shelf, reservation, "112") == 0
    assert book("A", 3) == [("correction", 12_000, 0), ("use", -112_000, -30_000)]
    assert shelf.balance("A") == (0, 0, 4)


def test_who_is_hit_finds_a_notice_that_does_not_tell_whose_work_it_was(shelf: Shelf) -> None:
    victim = shelf.hold(("A", 70_000), role="lead")
    other = Project.objects.create(code="SECRET-9", title="T", created_at=clock.now())
    keeper = shelf.actor("stock_keeper")
    keeper = type(keeper)(keeper.person_id, keeper.code, "none", "write", {other.pk: "chemist"})
    order = MovementOrder("use", mg("60"), "secret work")
    move_bottle(actor=keeper, bottle_code="A", order=order, project=other)
    notice = Notice.objects.get()
    assert (notice.person_code, notice.bottle_code, notice.line) == ("LEAD", "A", 1)
    assert (notice.reservation_code, notice.read_at) == (victim.code, None)
    assert notice.detail == (
        "70 mg of bottle A, set aside for a test, cannot be kept: more was taken out of it than "
        "was free. Set another bottle aside or release the rest."
    )
    given_back = Movement.objects.get(kind="release")
    assert (given_back.project_id, given_back.actor_code) == (shelf.project.pk, "STOCK_KEEPER")
    assert given_back.reason == "cancelled: more was taken out of it than was free"
    message = OutboxMessage.objects.get(topic="stock.holds_cancelled")
    assert json.loads(message.payload) == {
        "reservation": str(victim.code),
        "holds": [
            {"line": 1, "bottle": "A", "amount": "70 mg",
             "why": "more was taken out of it than was free"},
        ],
    }  # fmt: skip


def test_a_broken_bottle_is_emptied_and_keeps_no_hold(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000), ("B", 1_000))
    moved = move_bottle(
        actor=shelf.actor(), bottle_code="A", order=MovementOrder("loss", is_broken=True)
    )
    assert moved.cancelled_holds == 1
    assert shelf.balance("A") == (0, 0, 4)
    assert shelf.bottle("A").status == "disposed"
    assert shelf.bottle("A").balance.is_usable is False
    assert holds_of(reservation) == [(30_000, 0, 30_000, "cancelled"), (1_000, 0, 0, "open")]


def test_quarantine_cancels_all_holds_and_takes_no_new_one(shelf: Shelf) -> None:
    first, firm = shelf.hold(("A", 10_000)), shelf.hold(("A", 10_000))
    make_firm(actor=shelf.actor("lead"), code=firm.code, expires_on=date(2026, 12, 20))
    moved = set_bottle_status(
        actor=shelf.actor(), bottle_code="A", status="quarantined", reason="brown",
        check_version=lambda bottle: None,
    )  # fmt: skip
    assert moved.cancelled_holds == 2
    assert shelf.balance("A") == (100_000, 0, 5)
    assert {holds_of(r)[0][3] for r in (first, firm)} == {"cancelled"}
    before = whole_stock()
    with pytest.raises(NotAllowed):
        set_bottle_status(
            actor=shelf.actor(), bottle_code="A", status="usable", reason="",
            check_version=lambda bottle: None,
        )  # fmt: skip
    assert whole_stock() == before
    set_bottle_status(
        actor=shelf.actor("stock_keeper"), bottle_code="A", status="usable", reason="tested",
        check_version=lambda bottle: None,
    )  # fmt: skip
    shelf.hold(("A", 10_000))


def test_what_is_disposed_of_never_comes_back(shelf: Shelf) -> None:
    keeper = shelf.actor("stock_keeper")
    move_bottle(actor=keeper, bottle_code="A", order=MovementOrder("disposal"))
    assert shelf.balance("A") == (0, 0, 2)
    before = whole_stock()
    with pytest.raises(StateForbids, match="disposed of"):
        set_bottle_status(
            actor=keeper, bottle_code="A", status="usable", reason="",
            check_version=lambda bottle: None,
        )  # fmt: skip
    record_reading(
        actor=keeper, bottle_code="A",
        order=ReadingOrder("water_ppm", Decimal(9), date(2026, 12, 1), has_failed=True),
    )  # fmt: skip
    assert shelf.bottle("A").status == "disposed"
    assert whole_stock() == before


def test_a_failed_test_cancels_the_holds(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    order = ReadingOrder("peroxide_ppm", Decimal(250), date(2026, 12, 1), has_failed=True)
    record_reading(actor=shelf.actor(), bottle_code="A", order=order)
    assert shelf.bottle("A").status == "quarantined"
    assert holds_of(reservation)[0][3] == "cancelled"
    assert Notice.objects.get().detail.count("it is quarantined") == 1
    passed = ReadingOrder("peroxide_ppm", Decimal(2), date(2026, 12, 1))
    record_reading(actor=shelf.actor(), bottle_code="B", order=passed)
    assert shelf.bottle("B").status == "usable"


def test_another_bottle_than_held_frees_what_was_held(shelf: Shelf) -> None:
    reservation, theirs = shelf.hold(("A", 30_000)), shelf.hold(("B", 80_000))
    assert use(shelf, reservation, "25", bottle_code="B") == 1
    assert holds_of(reservation) == [(30_000, 0, 30_000, "used")]
    assert holds_of(theirs) == [(80_000, 0, 80_000, "cancelled")]
    assert shelf.balance("A") == (100_000, 0, 3)
    assert shelf.balance("B") == (75_000, 0, 4)
    line = Movement.objects.get(kind="use")
    assert (line.bottle.code, line.hold.bottle.code) == ("B", "A")


def test_a_part_from_another_bottle_frees_as_much(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    use(shelf, reservation, "25", bottle_code="B", closes=False)
    assert holds_of(reservation) == [(30_000, 0, 25_000, "open")]
    assert shelf.balance("A") == (100_000, 5_000, 3)


def test_an_operation_is_written_once(shelf: Shelf) -> None:
    reservation, operation = shelf.hold(("A", 30_000)), uuid.uuid4()
    for _ in range(3):
        used = use_reservation(
            actor=shelf.actor(), code=reservation.code, actuals=[Actual(1, mg("10"))],
            operation_id=operation,
        )  # fmt: skip
        assert used.reservation.state == "closed"
    assert shelf.balance("A") == (90_000, 0, 4)
    order = MovementOrder("loss", mg("1"), "spilt")
    with pytest.raises(StateForbids, match="something else"):
        move_bottle(actor=shelf.actor(), bottle_code="B", order=order, operation_id=operation)
    for _ in range(2):
        move_bottle(
            actor=shelf.actor(), bottle_code="B", order=order, operation_id=uuid.UUID(int=1)
        )
    assert shelf.balance("B") == (99_000, 0, 2)


def test_a_return_and_a_transfer_stand_in_the_book(shelf: Shelf) -> None:
    order = MovementOrder("return", mg("5"), "not needed", booked_on=date(2026, 11, 30))
    move_bottle(actor=shelf.actor(), bottle_code="A", order=order, project=shelf.project)
    assert book("A") == [("return", 5_000, 0)]
    assert Movement.objects.get(kind="return").booked_on == date(2026, 11, 30)
    with pytest.raises(InvalidValue):
        move_bottle(
            actor=shelf.actor(), bottle_code="A", order=MovementOrder("transfer", place_code="X")
        )
    from inventory.models import Place

    Place.objects.create(code="S2", name="Another")
    move = MovementOrder("transfer", place_code="S2", reason="cold")
    move_bottle(actor=shelf.actor(), bottle_code="A", order=move)
    assert Bottle.objects.get(code="A").place.code == "S2"
    assert Movement.objects.get(kind="transfer").reason == "S1 to S2: cold"
    assert shelf.balance("A") == (105_000, 0, 3)


@pytest.mark.parametrize(
    ("role", "kind"),
    [("viewer", "loss"), ("approver", "loss"), ("chemist", "disposal"), ("viewer", "use"),
     ("approver", "return"), ("lead", "disposal")],
)  # fmt: skip
def test_who_may_not_move_it_changes_nothing(role: str, kind: str, shelf: Shelf) -> None:
    before = whole_stock()
    with pytest.raises(NotAllowed):
        move_bottle(
            actor=shelf.actor(role), bottle_code="A", order=MovementOrder(kind, mg("1")),
            project=shelf.project,
        )  # fmt: skip
    assert whole_stock() == before


def test_what_is_malformed_changes_nothing(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 30_000))
    before = whole_stock()
    attempts = [
        Actual(2, mg("1")), Actual(1, mg("1"), "NO-SUCH"), Actual(1, mg("0.0001")),
        Actual(1, Asked("volume_ml", Decimal(1))), Actual(1, Asked("amount_mmol", Decimal(1))),
    ]  # fmt: skip
    for actual in attempts:
        with pytest.raises(InvalidValue):
            use_reservation(actor=shelf.actor(), code=reservation.code, actuals=[actual])
    with pytest.raises(InvalidValue, match="has not come yet"):
        use_reservation(
            actor=shelf.actor(), code=reservation.code, actuals=[Actual(1, mg("1"))],
            booked_on=date(2026, 12, 2),
        )  # fmt: skip
    with pytest.raises(NotFound):
        use_reservation(actor=shelf.actor(), code=uuid.uuid4(), actuals=[Actual(1, mg("1"))])
    assert whole_stock() == before
    assert verify_ledger().faults == ()


def test_a_reservation_with_a_cancelled_hold_is_not_made_firm(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 80_000), ("B", 1_000))
    move_bottle(actor=shelf.actor(), bottle_code="A", order=MovementOrder("loss", mg("50")))
    with pytest.raises(StateForbids, match="was cancelled"), transaction.atomic():
        make_firm(actor=shelf.actor("lead"), code=reservation.code, expires_on=date(2026, 12, 9))
    reservation.refresh_from_db()
    assert reservation.is_firm is False
