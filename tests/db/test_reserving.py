"""Set aside by substance or by bottle: which bottle is taken, and what is refused."""

import uuid
from datetime import date
from decimal import Decimal
from typing import Any

import pytest

from inventory.errors import NotConvertible, QuotaExceeded, StockShort
from inventory.models import Bottle, Hold, Movement, Place, Quota, Reading, Substance
from inventory.quantities import Asked
from inventory.services import (
    Actual,
    BottleReceipt,
    MovementOrder,
    QuotaOrder,
    ReservationLine,
    ReservationOrder,
    Reserved,
    Wanted,
    extend_reservation,
    give_back,
    move_bottle,
    receive_bottles,
    reserve,
    set_quota,
    use_reservation,
)
from labplan.base.errors import InvalidValue, NotAllowed, StaleCopy, StateForbids
from tests.db.bench import Shelf, make_shelf, whole_stock

pytestmark = pytest.mark.django_db


@pytest.fixture
def shelf() -> Shelf:
    return make_shelf(A=100_000)


def mg(value: str) -> Asked:
    return Asked("mass_mg", Decimal(value))


def ml(value: str) -> Asked:
    return Asked("volume_ml", Decimal(value))


def bottle(shelf: Shelf, code: str, amount: int, **fields: Any) -> Bottle:
    """A bottle of "solvent" with 1.5 g/mL, measured by volume [nL], without a heel."""
    substance, _ = Substance.objects.get_or_create(
        code="solvent", kind="material", name="A solvent", search_key="a solvent",
        density_g_per_ml=Decimal("1.5"), density_source="a table",
    )  # fmt: skip
    readings = fields.pop("readings", ())
    form = fields.pop("form", {"kind": "neat", "label": "neat"})
    receive_bottles(
        [
            BottleReceipt(
                code=code, substance=substance, form=form, place=Place.objects.get(),
                measured_by="volume", amount=amount, entered_amount=str(amount),
                entered_unit="nL", readings=readings,
                fields={
                    "received_on": date(2026, 6, 15), "stabiliser_state": "none", **fields,
                },
            )
        ],
        actor=shelf.actor("stock_keeper"), reason="a test",
    )  # fmt: skip
    Bottle.objects.filter(code=code).update(heel=0)
    return Bottle.objects.get(code=code)


def take(shelf: Shelf, *lines: ReservationLine, role: str = "chemist", **more: Any) -> Reserved:
    order = ReservationOrder(lines, "a test", **more)
    return reserve(actor=shelf.actor(role), project=shelf.project, order=order)


def solvent(amount: Asked, **wanted: Any) -> ReservationLine:
    return ReservationLine(amount, substance_code="solvent", wanted=Wanted(**wanted))


def held(made: Reserved) -> list[tuple[str, int]]:
    rows = Hold.objects.filter(reservation=made.reservation).order_by("line")
    return list(rows.values_list("bottle__code", "amount"))


ML = 1_000_000


def test_the_first_to_expire_then_the_open_one_then_the_smallest(shelf: Shelf) -> None:
    bottle(shelf, "NEW", 50 * ML, expires_on=date(2027, 6, 1))
    bottle(shelf, "OPEN", 60 * ML, expires_on=date(2027, 6, 1), opened_on=date(2026, 11, 1))
    bottle(shelf, "SOON", 70 * ML, expires_on=date(2026, 12, 1))
    bottle(shelf, "GONE", 80 * ML, expires_on=date(2026, 11, 30))
    bottle(shelf, "SMALL", 40 * ML, expires_on=date(2027, 6, 1))
    assert held(take(shelf, solvent(ml("60")))) == [("SOON", 60 * ML)]
    assert held(take(shelf, solvent(ml("35")))) == [("OPEN", 35 * ML)]
    assert held(take(shelf, solvent(ml("35")))) == [("SMALL", 35 * ML)]
    assert held(take(shelf, solvent(ml("35")))) == [("NEW", 35 * ML)]


def test_one_bottle_rather_than_two_and_two_rather_than_three(shelf: Shelf) -> None:
    bottle(shelf, "A1", 10 * ML, expires_on=date(2026, 12, 10))
    bottle(shelf, "A2", 30 * ML, expires_on=date(2026, 12, 20))
    bottle(shelf, "A3", 50 * ML, expires_on=date(2026, 12, 30))
    assert held(take(shelf, solvent(ml("40")))) == [("A3", 40 * ML)]
    assert held(take(shelf, solvent(ml("35")))) == [("A1", 10 * ML), ("A2", 25 * ML)]


def test_two_that_will_do_are_taken_though_another_expires_first(shelf: Shelf) -> None:
    bottle(shelf, "A1", 10 * ML, expires_on=date(2026, 12, 10))
    bottle(shelf, "A2", 30 * ML, expires_on=date(2026, 12, 20))
    bottle(shelf, "A3", 50 * ML, expires_on=date(2026, 12, 30))
    assert held(take(shelf, solvent(ml("70")))) == [("A2", 30 * ML), ("A3", 40 * ML)]


def test_grade_water_stabiliser_and_form_are_looked_at(shelf: Shelf) -> None:
    dry, old = (("water_ppm", Decimal(8), date(2026, 11, 20)),), date(2026, 9, 1)
    bottle(shelf, "DRY", 50 * ML, readings=dry, assay_pct=Decimal("99.9"))
    bottle(
        shelf, "STALE", 50 * ML, opened_on=old, readings=(("water_ppm", Decimal(8), old),),
        expires_on=date(2026, 12, 5),
    )  # fmt: skip
    bottle(
        shelf, "AMYL", 50 * ML, stabiliser_state="known", stabiliser_name="amylene",
        expires_on=date(2026, 12, 4),
    )  # fmt: skip
    bottle(shelf, "WHAT", 50 * ML, stabiliser_state="unknown", expires_on=date(2026, 12, 3))
    bottle(
        shelf, "SOLN", 50 * ML, expires_on=date(2026, 12, 2),
        form={"kind": "solution", "solution_basis": "mol_per_l", "solution_value": 1,
              "label": "solution, 1 mol/L"},
    )  # fmt: skip
    one = ml("1")
    assert held(take(shelf, solvent(one)))[0][0] == "WHAT"
    assert held(take(shelf, solvent(one, water_ppm_max=Decimal(30))))[0][0] == "DRY"
    assert held(take(shelf, solvent(one, assay_pct_min=Decimal("99.5"))))[0][0] == "DRY"
    assert held(take(shelf, solvent(one, stabilisers=("Amylene",))))[0][0] == "AMYL"
    assert held(take(shelf, solvent(one, stabilisers=("none",))))[0][0] == "STALE"
    assert held(take(shelf, solvent(one, form="solution, 1 mol/L")))[0][0] == "SOLN"
    with pytest.raises(StockShort, match="no bottle is fit"):
        take(shelf, solvent(one, water_ppm_max=Decimal(5)))


def test_mass_of_what_is_measured_is_converted_and_says_how(shelf: Shelf) -> None:
    bottle(shelf, "A1", 50 * ML)
    assert held(take(shelf, solvent(mg("15000")))) == [("A1", 10 * ML)]
    line = Movement.objects.get(kind="hold")
    assert (line.entered_amount, line.entered_unit) == ("15000", "mg")
    assert (line.density_g_per_ml, line.density_source) == (Decimal("1.5000"), "a table")
    before = whole_stock()
    with pytest.raises(NotConvertible):
        take(shelf, ReservationLine(ml("1"), bottle_code="A"))
    assert whole_stock() == before


def test_all_or_nothing_lists_every_short_line(shelf: Shelf) -> None:
    bottle(shelf, "A1", 50 * ML)
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        take(
            shelf, ReservationLine(mg("90"), bottle_code="A"), solvent(ml("10")),
            solvent(ml("50")),
        )  # fmt: skip
    assert whole_stock() == before
    assert [(line.field, line.detail) for line in refused.value.errors] == [
        ("lines[0]", "A: 90 mg needed, 80 mg can be used."),
        ("lines[2]", "solvent: 50 mL needed, can be used: A1 40 mL."),
    ]


def test_what_is_possible_is_set_aside_and_the_rest_listed(shelf: Shelf) -> None:
    bottle(shelf, "A1", 50 * ML)
    made = take(
        shelf, ReservationLine(mg("90"), bottle_code="A"), solvent(ml("60")),
        takes_what_there_is=True,
    )  # fmt: skip
    assert held(made) == [("A", 80_000), ("A1", 50 * ML)]
    assert [missing.line for missing in made.shortfalls] == [1, 2]
    before = whole_stock()
    with pytest.raises(StockShort):
        take(shelf, solvent(ml("1")), takes_what_there_is=True)
    assert whole_stock() == before


def test_less_than_can_be_dispensed_is_refused(shelf: Shelf) -> None:
    bottle(shelf, "A1", 50 * ML)
    before = whole_stock()
    for line in (solvent(ml("0.04")), ReservationLine(ml("0.04"), bottle_code="A1")):
        with pytest.raises(InvalidValue, match=r"Less than 0\.05 mL cannot be dispensed"):
            take(shelf, line)
    assert whole_stock() == before
    take(shelf, solvent(ml("0.05")))


def test_an_operation_reserves_once(shelf: Shelf) -> None:
    order = ReservationOrder((ReservationLine(mg("30"), bottle_code="A"),), "a test")
    codes = {
        reserve(
            actor=shelf.actor(), project=shelf.project, order=order,
            operation_id=uuid.UUID(int=5),
        ).reservation.code
        for _ in range(3)
    }  # fmt: skip
    assert len(codes) == 1
    assert shelf.balance("A") == (100_000, 30_000, 2)


@pytest.mark.parametrize("role", ["viewer", "stock_keeper", "approver"])
def test_who_may_not_reserve_changes_nothing(role: str, shelf: Shelf) -> None:
    before = whole_stock()
    with pytest.raises(NotAllowed):
        take(shelf, ReservationLine(mg("1"), bottle_code="A"), role=role)
    assert whole_stock() == before


def test_release_and_extend_look_at_the_version(shelf: Shelf) -> None:
    made = take(shelf, ReservationLine(mg("30"), bottle_code="A")).reservation
    assert made.expires_on == date(2026, 12, 15)
    changed = extend_reservation(
        actor=shelf.actor(), code=made.code, expires_on=date(2027, 1, 31),
        check_version=lambda r: None,
    )  # fmt: skip
    assert (changed.expires_on, changed.version) == (date(2027, 1, 31), 2)

    def stale(reservation: Any) -> None:
        raise StaleCopy("old")

    before = whole_stock()
    for day in (date(2027, 1, 30), date(2026, 11, 30), date(2027, 3, 4)):
        with pytest.raises(InvalidValue):
            extend_reservation(
                actor=shelf.actor(), code=made.code, expires_on=day, check_version=lambda r: None
            )
    with pytest.raises(StaleCopy):
        give_back(actor=shelf.actor(), code=made.code, reason="", check_version=stale)
    assert whole_stock() == before
    gone = give_back(
        actor=shelf.actor(), code=made.code, reason="not needed", check_version=lambda r: None
    )
    assert (gone.state, gone.version) == ("closed", 3)
    assert shelf.balance("A") == (100_000, 0, 3)
    with pytest.raises(StateForbids):
        give_back(actor=shelf.actor(), code=made.code, reason="", check_version=lambda r: None)


# ---- quotas ----


def quota(shelf: Shelf, amount: int, substance: str = "powder", kind: str = "mass") -> Quota:
    return set_quota(
        actor=shelf.actor("stock_keeper"), project=shelf.project,
        order=QuotaOrder(substance, date(2026, 12, 1), date(2026, 12, 31), kind, amount),
    )  # fmt: skip


def test_a_quota_says_what_is_left(shelf: Shelf) -> None:
    quota(shelf, 50_000)
    made = take(shelf, ReservationLine(mg("30"), bottle_code="A")).reservation
    before = whole_stock()
    with pytest.raises(QuotaExceeded) as refused:
        take(shelf, ReservationLine(mg("20.001"), bottle_code="A"))
    assert refused.value.detail == (
        "A powder: 20 mg of 50 mg are left for the project until 2026-12-31, 20.001 mg are asked "
        "for."
    )
    assert [line.code for line in refused.value.errors] == ["quota_exceeded"]
    with pytest.raises(QuotaExceeded):
        shelf.hold(("A", 20_001))  # as a procedure would
    assert whole_stock() == before
    # what is given back counts no more; what is used beyond a hold does, and is never refused
    use_reservation(actor=shelf.actor(), code=made.code, actuals=[Actual(1, mg("45"))])
    with pytest.raises(QuotaExceeded, match="5 mg of 50 mg are left"):
        take(shelf, ReservationLine(mg("6"), bottle_code="A"))
    back = MovementOrder("return", mg("5"))
    move_bottle(actor=shelf.actor(), bottle_code="A", order=back, project=shelf.project)
    take(shelf, ReservationLine(mg("6"), bottle_code="A"))


def test_a_quota_is_counted_across_bottles_and_measures(shelf: Shelf) -> None:
    bottle(shelf, "A1", 50 * ML)
    bottle(shelf, "A2", 50 * ML)
    quota(shelf, 45_000_000, "solvent")  # 45 g are 30 mL
    take(shelf, ReservationLine(ml("20"), bottle_code="A1"))
    with pytest.raises(QuotaExceeded, match="15000 mg of 45000 mg are left"):
        take(shelf, ReservationLine(ml("11"), bottle_code="A2"))
    take(shelf, ReservationLine(ml("10"), bottle_code="A2"))


def test_a_quota_of_another_period_or_project_does_not_count(shelf: Shelf) -> None:
    set_quota(
        actor=shelf.actor("stock_keeper"), project=shelf.project,
        order=QuotaOrder("powder", date(2026, 11, 1), date(2026, 11, 30), "mass", 0),
    )  # fmt: skip
    take(shelf, ReservationLine(mg("30"), bottle_code="A"))
    first = quota(shelf, 0)
    again = quota(shelf, 40_000)
    assert (first.pk, again.version, again.amount) == (again.pk, 2, 40_000)
    take(shelf, ReservationLine(mg("10"), bottle_code="A"))
    with pytest.raises(NotAllowed):
        set_quota(
            actor=shelf.actor("lead"), project=shelf.project,
            order=QuotaOrder("powder", date(2026, 12, 1), date(2026, 12, 31), "mass", 10**9),
        )  # fmt: skip
    assert Reading.objects.count() == 0
