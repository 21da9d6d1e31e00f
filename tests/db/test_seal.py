"""What is sealed, in which order, by how many processes; and that both databases agree on it."""

import io
import subprocess
import sys
import uuid
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
from django.core.management import CommandError, call_command
from django.test import override_settings

from inventory.models import Movement
from inventory.services.verify import verify_ledger
from labplan.base import clock, housekeeping
from labplan.base.events import record_event
from labplan.base.models import Event, Seal, SealRun
from labplan.base.seal import SealKeyChanged, newest_printed, seal_new, writing
from labplan.base.seal.printed import fault_of_printed, printed_value, read_printed
from labplan.base.seal.registry import Book, get_book, register_book
from labplan.base.seal.rows import RowReader
from tests.db.bench import Shelf, at_once, insert, make_shelf, rows_of

ROOT = Path(__file__).resolve().parents[2]


def runs() -> list[tuple[Any, ...]]:
    """(seal, book, bottle or "", first, last) of every run, in the order they were made."""
    codes = dict(rows_of("SELECT id, code FROM inventory_bottle"))
    return [
        (run.seal_id, run.book, codes.get(run.subject, ""), run.first, run.last)
        for run in SealRun.objects.order_by("id")
    ]


def note(*ids: int) -> None:
    """Events with ids of our choice, as transactions that commit out of order leave them."""
    for number in ids:
        insert(
            "base_event",
            {"id": number, "at": clock.now(), "actor_code": "A", "kind": "k", "subject": "s",
             "detail": "{}"},
        )  # fmt: skip


@pytest.fixture
def shelf(db: None) -> Shelf:
    shelf = make_shelf(A=100_000, B=100_000)
    shelf.hold(("A", 1_000))
    return shelf


def test_each_book_is_sealed_in_its_own_order_and_only_once(shelf: Shelf) -> None:
    assert seal_new() == 3
    assert runs() == [(1, "stock", "A", 1, 2), (1, "stock", "B", 1, 1)]
    assert seal_new() == 0
    shelf.hold(("A", 1_000), ("A", 500))
    assert seal_new() == 2
    assert runs()[2:] == [(2, "stock", "A", 3, 4)]
    first, second = Seal.objects.order_by("number")
    assert (first.before, second.before) == ("0" * 64, first.digest)
    assert [(s.number, s.runs, s.rows) for s in (first, second)] == [(1, 2, 3), (2, 1, 2)]
    assert second.sealed_at == clock.now()


def test_the_report_counts_what_is_sealed_and_what_is_not_yet(shelf: Shelf) -> None:
    seal_new()
    shelf.hold(("B", 1_000))
    record_event(actor_code="A", kind="k", subject="s")
    report = verify_ledger()
    assert report.faults == ()
    assert (report.seals, report.sealed_rows, report.unsealed_rows) == (1, 3, 2)
    assert report.newest == newest_printed()


@pytest.mark.usefixtures("db")
def test_with_nothing_new_no_seal_is_made() -> None:
    assert seal_new() == 0
    assert (Seal.objects.count(), newest_printed()) == (0, "")


def test_the_scheduler_seals_every_minute(shelf: Shelf) -> None:
    duty = housekeeping.duties()["base.seal"]
    assert duty.every == timedelta(minutes=1)
    assert [housekeeping.run_duty("base.seal") for _ in range(2)] == [3, 0]


@pytest.mark.usefixtures("db")
def test_numbers_committed_late_are_sealed_where_they_belong() -> None:
    note(11, 12, 15, 16)
    assert seal_new() == 4
    note(13, 18)  # 13 had been taken before, but was committed after the seal
    assert seal_new() == 2
    note(14, 17, 19)
    assert seal_new() == 3
    assert [run[3:] for run in runs()] == [
        (11, 12), (15, 16), (13, 13), (18, 18), (14, 14), (17, 17), (19, 19)
    ]  # fmt: skip
    report = verify_ledger()
    assert (report.faults, report.sealed_rows, report.unsealed_rows) == ((), 9, 0)


@pytest.mark.usefixtures("db")
def test_a_row_far_behind_the_sealed_ones_is_a_fault_and_not_sealed(
    request: pytest.FixtureRequest,
) -> None:
    request.applymarker(pytest.mark.spoils_the_book)
    note(5, writing.LOOK_BACK + 7)
    seal_new()
    note(6)
    assert seal_new() == 0
    assert [(f.bottle, f.where, f.detail) for f in verify_ledger().faults] == [
        ("events", "event 6", "is not sealed, though much later ones are")
    ]


def test_a_long_backlog_is_sealed_in_several_seals(
    shelf: Shelf, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(writing, "MOST_ROWS", 4)
    monkeypatch.setattr(writing, "LONGEST_RUN", 3)
    for _ in range(5):
        shelf.hold(("A", 10))
    record_event(actor_code="A", kind="k", subject="s")
    assert seal_new() == 9
    assert [s.rows for s in Seal.objects.order_by("number")] == [4, 4, 1]
    assert [run[:1] + run[2:] for run in runs()] == [
        (1, "", Event.objects.get().pk, Event.objects.get().pk),
        (1, "A", 1, 3), (2, "A", 4, 6), (2, "A", 7, 7), (3, "B", 1, 1),
    ]  # fmt: skip
    assert verify_ledger().sealed_rows == 9


@pytest.mark.django_db(transaction=True)
def test_several_sealers_at_once_seal_every_row_once() -> None:
    shelf = make_shelf(A=100_000, B=100_000)
    for round_number in range(4):
        shelf.hold(("A", 10), ("B", 10))
        record_event(actor_code="A", kind="k", subject=f"round {round_number}")
        counts = at_once(*[seal_new] * 4)
        assert all(isinstance(count, int) for count in counts), counts
        assert max(counts) >= 1
    seal_new()
    report = verify_ledger()
    assert (report.faults, report.unsealed_rows) == ((), 0)
    assert report.sealed_rows == Movement.objects.count() + Event.objects.count() == 14
    assert sum(Seal.objects.values_list("rows", flat=True)) == 14


@pytest.mark.django_db(transaction=True)
def test_sealing_and_checking_go_on_while_others_write() -> None:
    """Four writers, a sealer and a checker: no fault is seen that is none."""
    shelf = make_shelf(A=1_000_000, B=1_000_000)

    def write() -> int:
        for _ in range(12):
            shelf.hold(("A", 10), ("B", 10))
            record_event(actor_code="A", kind="k", subject="s")
        return 0

    def look() -> int:
        return sum(len(verify_ledger().faults) for _ in range(8))

    def seal() -> int:
        for _ in range(8):
            seal_new()
        return 0

    assert at_once(write, write, look, seal) == [0, 0, 0, 0]
    seal_new()
    assert verify_ledger().unsealed_rows == 0


@pytest.mark.usefixtures("shelf")
def test_another_key_seals_nothing_and_says_so() -> None:
    seal_new()
    record_event(actor_code="A", kind="k", subject="s")
    with (
        override_settings(SEAL_KEY="another key, as long as any other one"),
        pytest.raises(SealKeyChanged, match="Seal 1 was made with the key"),
    ):
        seal_new()
    assert Seal.objects.count() == 1
    assert seal_new() == 1


@pytest.mark.spoils_the_book
def test_both_databases_write_a_row_the_same_way(shelf: Shelf) -> None:
    """The code of a row is pinned: a move from SQLite to PostgreSQL breaks no seal."""
    row = Movement.objects.filter(bottle__code="B").values().get()
    Movement.objects.create(
        **row | {
            "id": 4711, "seq": 2, "kind": "correction", "on_hand_change": 5,
            "on_hand_after": 100_005, "entered_amount": "5 \u00b5g", "entered_unit": "ug",
            "density_g_per_ml": Decimal("0.827"), "operation": uuid.UUID(int=7),
            "actor_code": "A", "reason": 'a "quoted" \\ reason', "booked_on": date(2026, 12, 1),
            "recorded_at": datetime(2026, 12, 1, 23, 0, 0, 120, tzinfo=UTC),
        }
    )  # fmt: skip
    reader = RowReader(get_book("stock"), b"k")
    (found,) = reader.rows_after(shelf.bottle("B").pk, 1, 9)
    named = dict(zip(reader.columns, found, strict=True)) | {"bottle_id": 1}
    # columns that are added later do not count here
    values = [named[name] if name in PINNED_COLUMNS else None for name in reader.columns]
    assert reader.code_of(tuple(values)).hex() == PINNED


PINNED = "a6b5549f9ee4db23addb99a4fe1db00c18c5efdf2dcf3c270fec283b7ea661b8"
PINNED_COLUMNS = {
    "id", "bottle_id", "seq", "kind", "on_hand_change", "held_change", "on_hand_after",
    "held_after", "entered_amount", "entered_unit", "density_g_per_ml", "operation", "actor_code",
    "reason", "booked_on", "recorded_at",
}  # fmt: skip


def test_a_column_added_later_and_empty_changes_no_code(shelf: Shelf) -> None:
    reader = RowReader(get_book("stock"), b"k")
    row = next(reader.all_rows())
    code = reader.code_of(row)
    reader.columns.append("a_new_column")
    assert reader.code_of((*row, None)) == code
    assert reader.code_of((*row, 0)) != code


def test_two_books_of_one_name_are_refused() -> None:
    register_book(get_book("stock"))
    with pytest.raises(ValueError, match="two books are called stock"):
        register_book(Book("stock", Event))


def test_a_printed_seal_is_read_back_as_people_type_it(shelf: Shelf) -> None:
    seal_new()
    seal = Seal.objects.get()
    printed = newest_printed()
    assert printed == printed_value(1, seal.digest)
    assert read_printed(f" {printed.lower()} ") == (1, seal.digest[:16])
    assert fault_of_printed(printed) == ""
    for bad in ("", "1", "12-9F3A-61B2-C0D4", "0-9F3A-61B2-C0D4-5E77", "x", "1-9F3A61B2C0D45E77"):
        assert read_printed(bad) is None
        assert "is no printed seal" in fault_of_printed(bad)
    assert "the chain ends at seal 1: it was cut" in fault_of_printed("2-9F3A-61B2-C0D4-5E77")
    assert "here it is 1-" in fault_of_printed("1-0000-0000-0000-0000")


def test_the_commands_seal_and_find_the_printed_value(shelf: Shelf) -> None:
    said = io.StringIO()
    call_command("seal", stdout=said)
    assert said.getvalue() == f"3 rows sealed; the newest seal is {newest_printed()}.\n"
    checked = io.StringIO()
    call_command("verify_ledger", newest=newest_printed(), stdout=checked)
    assert checked.getvalue().splitlines()[1] == (
        f"1 seals, the newest {newest_printed()}, over 3 rows; 0 rows are not sealed yet."
    )
    complained = io.StringIO()
    with pytest.raises(CommandError, match=r"1 fault\(s\)"):
        call_command("verify_ledger", newest="9-9F3A-61B2-C0D4-5E77", stderr=complained)
    assert complained.getvalue() == (
        "seals, paper: the paper names seal 9-9F3A-61B2-C0D4-5E77, the chain ends at seal 1: "
        "it was cut\n"
    )


def test_the_clock_may_stand_or_go_back(shelf: Shelf) -> None:
    seal_new()
    with clock.replaced_by(clock.standing_at(clock.now() - timedelta(days=1))):
        shelf.hold(("A", 10))
        assert seal_new() == 1
    assert verify_ledger().faults == ()


def test_the_key_is_made_once_and_kept_from_others(tmp_path: Path) -> None:
    from labplan.settings.secret import read_or_make_secret_key

    made = read_or_make_secret_key(tmp_path, "seal-key")
    assert read_or_make_secret_key(tmp_path, "seal-key") == made
    assert len(made) == 64
    assert (tmp_path / "seal-key").stat().st_mode & 0o777 == 0o600
    assert read_or_make_secret_key(tmp_path) != made


def test_a_short_key_is_refused_at_start(tmp_path: Path) -> None:
    code = "from labplan.settings import secret as s; s.read_seal_key(s.Path())"
    ended = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, env={"LABPLAN_SEAL_KEY": "short"},
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert ended.returncode == 1
    assert "The key of the seals has 5 characters" in ended.stderr
