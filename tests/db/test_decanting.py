"""Decanting: two lines, a lineage, the heel kept; what is prepared in the house is said anew."""

import uuid
from datetime import date
from decimal import Decimal
from typing import Any

import pytest

from inventory.errors import StockShort
from inventory.models import Bottle, Movement, Reading
from inventory.quantities import Asked
from inventory.services import DecantOrder, Preparation, decant
from labplan.base.errors import InvalidValue, NotAllowed, NotFound, StateForbids
from tests.db.bench import at_once, codes_of, whole_stock
from tests.laboratory import Laboratory


def ml(value: str) -> Asked:
    return Asked("volume_ml", Decimal(value))


def fill(lab: Laboratory, parent: str, amount: str, person: str = "MIRA", **more: Any) -> Bottle:
    order = DecantOrder(more.pop("code", "NEW-1"), ml(amount), more.pop("place", "S1"), **more)
    code = decant(actor=lab.actor(person), bottle_code=parent, order=order)
    return lab.bottle(code)


def a_solvent(lab: Laboratory) -> Bottle:
    """A sound bottle of dichloromethane with a water reading."""
    rows = Bottle.objects.filter(
        form__substance__code="dichloromethane", status="usable", readings__kind="water_ppm"
    )
    return lab.bottle(rows.order_by("code")[0].code)


def test_a_child_has_its_parents_label_and_lineage(lab: Laboratory) -> None:
    parent = a_solvent(lab)
    before = parent.balance
    child = fill(lab, parent.code, "100", tare_ug=120_000_000)
    assert (child.balance.on_hand, child.balance.held, child.balance.seq) == (100_000_000, 0, 1)
    after = lab.bottle(parent.code).balance
    assert (after.on_hand, after.seq) == (before.on_hand - 100_000_000, before.seq + 1)
    assert child.parent == parent
    out, into = Movement.objects.filter(kind__startswith="decant").order_by("part")
    assert child.parent_movement == out
    assert (out.kind, out.on_hand_change, into.kind, into.on_hand_change) == (
        "decant_out", -100_000_000, "decant_in", 100_000_000,
    )  # fmt: skip
    assert (out.operation, out.part, into.part) == (into.operation, 1, 2)
    for name in ("form", "lot", "assay_pct", "stabiliser_state", "stabiliser_name", "expires_on"):
        assert getattr(child, name) == getattr(parent, name), name
    assert (child.heel, child.tare_ug, child.preparation) == (5_000_000, 120_000_000, "")
    water = Reading.objects.get(bottle=child, kind="water_ppm")
    original = Reading.objects.filter(bottle=parent, kind="water_ppm").latest("read_on")
    assert (water.value, water.read_on) == (original.value, original.read_on)
    assert lab.bottle(parent.code).opened_on is not None


def test_a_dried_solvent_says_everything_anew(lab: Laboratory) -> None:
    parent = a_solvent(lab)
    made = Preparation(
        "dried over 3A sieves for 48 h", {"kind": "neat", "label": "neat"},
        {"stabiliser_state": "none", "stabiliser_name": ""}, Decimal(4),
    )  # fmt: skip
    child = fill(lab, parent.code, "50", preparation=made, expires_on=date(2027, 1, 1))
    assert child.preparation == "dried over 3A sieves for 48 h"
    assert (child.stabiliser_state, child.assay_pct) == ("none", None)
    assert child.expires_on == date(2027, 1, 1)
    [water] = Reading.objects.filter(bottle=child)
    assert (water.kind, water.value, water.read_on) == ("water_ppm", 4, date(2026, 12, 1))
    unread = Preparation(made.text, made.form, made.stabiliser, None)
    other = fill(lab, parent.code, "50", code="NEW-2", preparation=unread)
    assert Reading.objects.filter(bottle=other).count() == 0


def test_the_heel_and_what_is_held_stay_in_the_parent(lab: Laboratory) -> None:
    parent = a_solvent(lab)
    usable = parent.balance.on_hand - parent.balance.held - parent.heel
    before = whole_stock()
    with pytest.raises(StockShort) as refused:
        fill(lab, parent.code, str((Decimal(usable) + 1) / 1_000_000))
    assert refused.value.shortfalls[0].usable == usable
    assert whole_stock() == before
    assert not Bottle.objects.filter(code="NEW-1").exists()
    fill(lab, parent.code, str(Decimal(usable) / 1_000_000))


def test_what_does_not_fit_is_refused_and_changes_nothing(lab: Laboratory) -> None:
    parent = a_solvent(lab)
    before = whole_stock()
    for more in ({"code": parent.code}, {"place": "NOWHERE"}, {"booked_on": date(2026, 12, 2)}):
        with pytest.raises(InvalidValue):
            fill(lab, parent.code, "1", **more)
    with pytest.raises(InvalidValue, match=r"At least 0\.05 mL"):
        fill(lab, parent.code, "0.049")
    with pytest.raises(NotFound):
        fill(lab, "NO-SUCH", "1")
    lab.add_member("GUEST", "viewer")
    with pytest.raises(NotAllowed):
        fill(lab, parent.code, "1", person="GUEST")
    Bottle.objects.filter(pk=parent.pk).update(status="quarantined")
    with pytest.raises(StateForbids):
        fill(lab, parent.code, "1")
    assert whole_stock() == before


def test_an_operation_fills_one_bottle(lab: Laboratory) -> None:
    parent, order = a_solvent(lab), DecantOrder("NEW-1", ml("10"), "S1")
    for _ in range(2):
        code = decant(
            actor=lab.actor(), bottle_code=parent.code, order=order,
            operation_id=uuid.UUID(int=3),
        )  # fmt: skip
        assert code == "NEW-1"
    assert Movement.objects.filter(kind="decant_out").count() == 1


def test_of_many_decants_to_one_new_code_at_once_one_is_made(live_lab: Laboratory) -> None:
    parent = a_solvent(live_lab)
    before = parent.balance
    results = at_once(*[lambda: fill(live_lab, parent.code, "10", code="NEW-7")] * 4)
    refused = [result for result in results if isinstance(result, InvalidValue)]
    assert [codes_of(error.errors) for error in refused] == [[("code", "bottle_exists")]] * 3
    [made] = [result for result in results if isinstance(result, Bottle)]
    assert (made.code, made.balance.on_hand) == ("NEW-7", 10_000_000)
    after = live_lab.bottle(parent.code).balance
    assert (after.on_hand, after.seq) == (before.on_hand - 10_000_000, before.seq + 1)
