"""Stock-taking by weight: what is a discrepancy, what is none, and what a file may say."""

import json
from datetime import date
from decimal import Decimal
from io import StringIO
from pathlib import Path
from typing import Any

import pytest
from django.core.management import CommandError, call_command

from inventory.models import Bottle, Movement, Place, Substance
from inventory.quantities import Asked
from inventory.services import BottleReceipt, Count, count_bottles, receive_bottles
from inventory.services.facts import verdict_on
from labplan.base.errors import InvalidValue, NotAllowed
from labplan.base.models import Event
from tests.db.bench import Shelf, make_shelf, whole_stock

pytestmark = pytest.mark.django_db
TARE_UG = 50_000_000


@pytest.fixture
def shelf() -> Shelf:
    made = make_shelf(A=10_000_000, B=10_000_000)
    Bottle.objects.filter(code="A").update(tare_ug=TARE_UG)
    return made


def count(shelf: Shelf, *counts: Count, role: str = "stock_keeper") -> list[tuple[str, str, int]]:
    taken = count_bottles(actor=shelf.actor(role), counts=counts)
    return [(c.bottle.code, c.verdict, c.found) for c in taken.counted]


def gross(net_ug: int, **more: Any) -> Count:
    return Count("A", gross_ug=TARE_UG + net_ug, **more)


@pytest.mark.parametrize(
    ("book", "found", "uncertainty", "verdict"),
    [
        (1000, 1000, 0, "agrees"),
        (1000, 1010, 10, "within_uncertainty"),
        (1000, 1011, 11, "within_uncertainty"),
        (1000, 1009, 0, "under_1_pct"),
        (1000, 991, 0, "under_1_pct"),
        (1000, 990, 9, "corrected"),
        (1000, 1010, 9, "corrected"),
        (0, 1, 0, "corrected"),
        (0, 1, 1, "within_uncertainty"),
        (100, 0, 0, "corrected"),
    ],
)
def test_what_is_a_discrepancy(book: int, found: int, uncertainty: int, verdict: str) -> None:
    assert verdict_on(book, found, uncertainty) == verdict


def test_a_difference_that_is_none_leaves_the_book_and_is_said(shelf: Shelf) -> None:
    before = whole_stock()
    assert count(shelf, gross(9_900_001)) == [("A", "under_1_pct", 9_900_001)]
    wide = gross(9_000_000, uncertainty_ug=1_000_000)
    assert count(shelf, wide) == [("A", "within_uncertainty", 9_000_000)]
    assert count(shelf, gross(10_000_000)) == [("A", "agrees", 10_000_000)]
    assert whole_stock() == before
    event = Event.objects.filter(kind="bottle.counted").first()
    assert event is not None
    assert event.subject == "bottle A"
    assert json.loads(event.detail) == {
        "before": "10000 mg",
        "after": {"found": "9900.001 mg", "uncertainty": "20 mg", "verdict": "under_1_pct"},
    }


def test_a_discrepancy_is_corrected_both_ways_and_cancels_holds(shelf: Shelf) -> None:
    reservation = shelf.hold(("A", 9_000_000))
    assert count(shelf, gross(8_000_000, note="spilt?")) == [("A", "corrected", 8_000_000)]
    assert shelf.balance("A") == (8_000_000, 0, 4)
    assert reservation.holds.get().state == "cancelled"
    line = Movement.objects.get(kind="correction")
    assert (line.on_hand_change, line.reason) == (-2_000_000, "spilt?")
    count(shelf, gross(8_500_000))
    assert shelf.balance("A") == (8_500_000, 0, 5)


def test_a_tare_is_kept_for_the_next_time(shelf: Shelf) -> None:
    with pytest.raises(InvalidValue, match="Nobody has weighed B empty"):
        count(shelf, Count("B", gross_ug=70_000_000))
    found = count(shelf, Count("B", gross_ug=70_000_000, tare_ug=60_500_000))
    assert found == [("B", "corrected", 9_500_000)]
    bottle = shelf.bottle("B")
    assert (bottle.tare_ug, bottle.version) == (60_500_000, 2)
    assert count(shelf, Count("B", gross_ug=70_000_000)) == [("B", "agrees", 9_500_000)]


def test_a_measured_bottle_is_weighed_by_its_density(shelf: Shelf) -> None:
    substance = Substance.objects.create(
        code="dcm", kind="material", name="A solvent", search_key="s",
        density_g_per_ml=Decimal("1.326"),
    )  # fmt: skip
    receive_bottles(
        [
            BottleReceipt(
                code="D", substance=substance, form={"kind": "neat", "label": "neat"},
                place=Place.objects.get(), measured_by="volume", amount=1_000_000_000,
                entered_amount="1", entered_unit="L",
                fields={"received_on": date(2026, 6, 1), "stabiliser_state": "none",
                        "tare_ug": 400_000_000},
            )
        ],
        actor=shelf.actor("stock_keeper"), reason="t",
    )  # fmt: skip
    # 1326.0 g at the book; 1325.99 g weighed is 0.0075 mL less
    assert count(shelf, Count("D", gross_ug=1_725_990_000)) == [
        ("D", "within_uncertainty", 999_992_459)
    ]
    assert count(shelf, Count("D", gross_ug=1_063_000_000)) == [("D", "corrected", 500_000_000)]
    content = Count("D", content=Asked("volume_ml", Decimal(250)))
    assert count(shelf, content) == [("D", "corrected", 250_000_000)]
    empty = Count("D", content=Asked("volume_ml", Decimal(0)))
    assert count(shelf, empty) == [("D", "corrected", 0)]


def test_one_wrong_line_stops_all_and_every_wrong_one_is_listed(shelf: Shelf) -> None:
    before = whole_stock()
    with pytest.raises(InvalidValue) as refused:
        count(
            shelf, gross(5_000_000), Count("NO"), gross(1), Count("B", gross_ug=1),
            Count("B", gross_ug=1),
        )  # fmt: skip
    assert [(line.field, line.code) for line in refused.value.errors] == [
        ("lines[1].bottle", "unknown_bottle"),
        ("lines[2].bottle", "repeated"),
        ("lines[3].tare_mg", "tare_missing"),
        ("lines[4].bottle", "repeated"),
    ]
    with pytest.raises(InvalidValue, match="Less than the empty bottle"):
        count(shelf, gross(-1))
    with pytest.raises(NotAllowed):
        count(shelf, gross(5_000_000), role="chemist")
    assert whole_stock() == before


def run(tmp_path: Path, text: str) -> str:
    path, out = tmp_path / "counts.csv", StringIO()
    path.write_text(text, encoding="utf-8")
    call_command("count_stock", str(path), person="STOCK_KEEPER", stdout=out)
    return out.getvalue()


def test_a_file_is_counted_by_the_command(shelf: Shelf, tmp_path: Path) -> None:
    said = run(tmp_path, "bottle,gross_g,tare_g,mass_mg,uncertainty_mg\nA,59.95,,,\nB,,,8000,100\n")
    assert said.splitlines() == [
        "A: book 10000 mg, found 9950 mg, no discrepancy: under 1 % of the book",
        "B: book 10000 mg, found 8000 mg, corrected",
        "2 bottles counted, 1 corrected, 0 holds cancelled.",
    ]
    assert shelf.balance("B") == (8_000_000, 0, 2)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("bottle,gross_g\nA,59,5\n", "row 2: 2 columns|3 cells"),
        ("bottle,gross_g\nA,abc\n", "row 2, gross_g"),
        ("bottle,gross_g\nA,\n", "row 2, gross_g: Give one of"),
        ("bottle,gross_g\nA,60\nNO,60\n", "row 3, bottle: No bottle NO"),
        ("bottle,gross_g\nA,60\nB,60\n", "row 3, tare_mg: Nobody has weighed B"),
        ("bottle,gross_g,colour\nA,60,red\n", "'colour' is not a column"),
    ],
)
def test_a_file_with_an_error_changes_nothing(
    text: str, said: str, shelf: Shelf, tmp_path: Path
) -> None:
    before = whole_stock()
    with pytest.raises(CommandError, match=said):
        run(tmp_path, text)
    assert whole_stock() == before
