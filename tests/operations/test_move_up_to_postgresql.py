"""A laptop's SQLite database goes to PostgreSQL whole and exact, or not at all."""

import os
import signal
import sqlite3
import subprocess
import sys
from decimal import Decimal
from pathlib import Path
from typing import Any

import psycopg
import pytest
from django.apps import apps
from django.core.management import CommandError
from django.db import connection, transaction

from inventory.models import Bottle, Movement, Place
from inventory.services import BottleReceipt, receive_bottles
from inventory.services.verify import verify_ledger
from labplan.base import append_only, outbox
from labplan.base.models import OutboxMessage, Person
from labplan.base.rights import actor_for
from labplan.base.seal import newest_printed, seal_new
from labplan.operations import moving
from labplan.operations.elsewhere import open_database
from labplan.operations.state import tables_with_rows
from labplan.operations.tables import Table, tables_in_order
from labplan.procedures.models import Procedure
from labplan.procedures.services import verify_documents
from tests.db.bench import trigger_names
from tests.operations.house import Builder, House, deliver_all, file_of, request_one

ROOT = Path(__file__).resolve().parents[2]
# A move like any other, but for the function in which it is killed.
MOVE = """
import os, signal, sys
import django
django.setup()
from labplan.operations import moving
plain = getattr(moving, sys.argv[2])
def die(*args, **kwargs):
    if sys.argv[3] in ("", getattr(args[0], "name", "")):
        print("reached", flush=True)
        os.kill(os.getpid(), signal.SIGKILL)
    return plain(*args, **kwargs)
setattr(moving, sys.argv[2], die)
moving.move_up(sys.argv[1], progress=lambda *_: None)
"""


@pytest.fixture
def server(build: Builder) -> House:
    return build.postgresql()


def _rows(house: House) -> dict[str, list[Any]]:
    """All rows of all models as Python values, read without the code under test."""
    with house.entered():
        return {
            model._meta.label: [
                tuple(bytes(v) if isinstance(v, memoryview) else v for v in row)
                for row in model._base_manager.order_by("pk").values_list()
            ]
            for model in apps.get_models(include_auto_created=True)
        }


def _tables(house: House) -> set[str]:
    with house.entered():
        return set(connection.introspection.table_names())


def _filled_tables(house: House) -> list[str]:
    database = open_database(house.url)
    try:
        return tables_with_rows(database)
    finally:
        database.close()


def _pause(laptop: House) -> None:
    with laptop.entered():
        outbox.pause("a row for every table")


def test_every_row_of_every_table_is_the_same_on_both_sides(laptop: House, server: House) -> None:
    _pause(laptop)
    before = _rows(laptop)
    empty = [label for label, rows in before.items() if not rows]
    assert empty == [], "fill these in tests/operations/house.py, so that the move is seen to work"
    said = laptop.run("move_up", server.url)
    assert _rows(server) == before
    lines = {line.split()[0] for line in said.splitlines()}
    assert _tables(server) - {"django_migrations"} <= lines
    assert "on both sides every book adds up, every hash matches." in said
    assert "Set DATABASE_URL" in said
    assert "the outbox of the target is paused too" in said


def test_a_model_that_is_left_out_is_noticed(laptop: House) -> None:
    assert {table.name for table in tables_in_order()} == _tables(laptop) - {
        "django_migrations", "sqlite_sequence",
    }  # fmt: skip


def test_rows_come_after_those_they_must_point_to() -> None:
    place = {table.model: number for number, table in enumerate(tables_in_order())}
    for model, number in place.items():
        for field in model._meta.local_concrete_fields:
            if field.is_relation and not field.null and field.related_model is not model:
                assert place[field.related_model] < number, field


def test_books_documents_and_triggers_are_in_force_on_the_server(
    laptop: House, server: House
) -> None:
    laptop.run("move_up", server.url)
    with server.entered():
        assert verify_ledger().faults == ()
        assert (verify_documents().documents, verify_documents().faults) == (2, ())
        assert "inventory_movement_carries_on" in trigger_names()
        assert "inventory_movement_no_change" in trigger_names()
        books: dict[int, list[int]] = {}
        for bottle, seq in Movement.objects.order_by("bottle", "seq").values_list("bottle", "seq"):
            books.setdefault(bottle, []).append(seq)
        assert len(books) == 66
        assert all(seqs == list(range(1, len(seqs) + 1)) for seqs in books.values())


def test_the_seals_hold_at_the_server_and_go_on_there(laptop: House, server: House) -> None:
    laptop.run("move_up", server.url)
    with laptop.entered():
        printed, sealed = newest_printed(), verify_ledger()
    with server.entered():
        moved = verify_ledger(newest=printed)
        assert (moved.faults, moved.seals, moved.sealed_rows) == ((), 2, sealed.sealed_rows)
        assert seal_new() == moved.unsealed_rows > 0
        assert verify_ledger(newest=printed).faults == ()
        assert newest_printed().startswith("3-")
        with transaction.atomic(), append_only.lifted(connection), connection.cursor() as cursor:
            cursor.execute("UPDATE inventory_movement SET reason = 'x' WHERE id = 1")
        [fault] = verify_ledger().faults
        assert fault.detail == "is not as sealed (seal 1)"


def test_work_goes_on_at_the_server_with_numbers_never_used_before(
    laptop: House, server: House
) -> None:
    with laptop.entered():
        request_one()
        last = OutboxMessage.objects.order_by("-pk").values_list("pk", flat=True)[0]
        OutboxMessage.objects.filter(pk=last).delete()  # its number was given all the same
        newest = Bottle.objects.order_by("-pk").values_list("pk", flat=True)[0]
        waiting = OutboxMessage.objects.filter(state="new").count()
    laptop.run("move_up", server.url)
    with server.entered():
        _receive_a_bottle()
        assert Bottle.objects.get(code="NEW-1").pk == newest + 1
        procedure = request_one()
        message = OutboxMessage.objects.order_by("-pk")[0]
        assert message.pk == last + 1
        assert deliver_all() == waiting + 1
        procedure.refresh_from_db()
        assert procedure.state == "planned"
        assert verify_ledger().faults == ()


def _receive_a_bottle() -> None:
    known = Bottle.objects.select_related("form__substance").filter(measured_by="mass")[0]
    receipt = BottleReceipt(
        code="NEW-1", substance=known.form.substance, form={"kind": "neat", "label": "new"},
        place=Place.objects.all()[0], measured_by="mass", amount=1_000_000,
        entered_amount="1000", entered_unit="mg",
        fields={"received_on": known.received_on, "stabiliser_state": "not_applicable"},
    )  # fmt: skip
    with transaction.atomic():
        keeper = Person.objects.get(memberships__role="stock_keeper")
        receive_bottles([receipt], actor=actor_for(keeper), reason="a test")


def test_the_laptop_is_paused_and_says_where_its_data_went(laptop: House, server: House) -> None:
    with laptop.entered():
        assert not outbox.is_paused()
    laptop.run("move_up", server.url)
    with laptop.entered():
        pause = outbox.find_pause()
        assert pause is not None
        assert pause.reason.startswith("moved to dbname=labplan_test_")
        assert deliver_all() == 0
    with server.entered():
        assert not outbox.is_paused()


def test_a_target_with_tables_but_no_rows_is_empty(laptop: House, server: House) -> None:
    server.run("migrate", verbosity=0)
    laptop.run("move_up", server.url)
    assert _rows(server)["inventory.Bottle"] == _rows(laptop)["inventory.Bottle"]


def test_a_second_move_is_refused_and_changes_nothing(laptop: House, server: House) -> None:
    laptop.run("move_up", server.url)
    with server.entered():
        request_one()
    before, of_laptop = _rows(server), _rows(laptop)
    with pytest.raises(CommandError, match="is not empty"):
        laptop.run("move_up", server.url)
    assert (_rows(server), _rows(laptop)) == (before, of_laptop)


def test_a_target_with_one_row_or_a_foreign_table_is_refused(
    laptop: House, server: House, build: Builder
) -> None:
    before = _rows(laptop)
    server.run("migrate", verbosity=0)
    with psycopg.connect(server.url, autocommit=True) as session:
        session.execute(
            "INSERT INTO inventory_place (code, name, is_locked) VALUES ('a', 'a', 'f')"
        )
    with pytest.raises(CommandError, match="is not empty: inventory_place holds rows"):
        laptop.run("move_up", server.url)
    assert _filled_tables(server) == ["inventory_place"]
    other = build.postgresql()
    with psycopg.connect(other.url, autocommit=True) as session:
        session.execute("CREATE TABLE thing (id int)")
    with pytest.raises(CommandError, match="not labplan's: thing"):
        laptop.run("move_up", other.url)
    assert _tables(other) == {"thing"}
    assert _rows(laptop) == before


def test_a_row_that_comes_in_after_the_first_look_is_found(
    laptop: House, server: House, monkeypatch: pytest.MonkeyPatch
) -> None:
    plain = moving._prepare

    def prepare(*arguments: Any) -> None:
        plain(*arguments)
        with psycopg.connect(server.url, autocommit=True) as session:
            session.execute(
                "INSERT INTO inventory_place (code, name, is_locked) VALUES ('a','a','f')"
            )

    monkeypatch.setattr(moving, "_prepare", prepare)
    with pytest.raises(CommandError, match="is not empty: inventory_place"):
        laptop.run("move_up", server.url)
    assert _filled_tables(server) == ["inventory_place"]


def _require_nothing_happened(laptop: House, server: House, before: dict[str, list[Any]]) -> None:
    assert _filled_tables(server) == []
    assert _rows(laptop) == before


@pytest.mark.parametrize(
    ("function", "table"),
    [("_require_equal", "inventory_movement"), ("_set_sequences", ""), ("_require_the_same", "")],
)
def test_a_kill_in_the_middle_leaves_no_rows(
    laptop: House, server: House, function: str, table: str
) -> None:
    before = _rows(laptop)
    environment = {
        **os.environ, "DATABASE_URL": laptop.url, "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }  # fmt: skip
    ended = subprocess.run(
        [sys.executable, "-c", MOVE, server.url, function, table],
        cwd=ROOT, env=environment, capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert (ended.returncode, ended.stdout) == (-signal.SIGKILL, "reached\n"), ended.stderr
    _require_nothing_happened(laptop, server, before)
    laptop.run("move_up", server.url)
    assert _filled_tables(server) != []


@pytest.mark.parametrize(
    ("sql", "told"),
    [
        ("UPDATE inventory_place SET name = 'a' || char(0)", "inventory_place"),
        ("UPDATE inventory_place SET code = 'much too long for the column of a code'", "too long"),
        ("UPDATE inventory_place SET temperature_c = 123456.7", "row 13: a number has more"),
    ],
)
def test_a_value_that_the_server_cannot_hold_stops_everything(
    laptop: House, server: House, sql: str, told: str
) -> None:
    with sqlite3.connect(file_of(laptop)) as file:
        file.execute(sql + " WHERE id = (SELECT max(id) FROM inventory_place)")
    file.close()
    before = _rows(laptop) if "temperature" not in sql else None
    with pytest.raises(CommandError, match=told):
        laptop.run("move_up", server.url)
    assert _filled_tables(server) == []
    if before is not None:
        assert _rows(laptop) == before


def _slightly_less(row: list[Any]) -> list[Any]:
    return [v - Decimal("0.0001") if isinstance(v, Decimal) else v for v in row]


def test_a_value_that_arrives_otherwise_is_found(
    laptop: House, server: House, monkeypatch: pytest.MonkeyPatch
) -> None:
    before, plain = _rows(laptop), moving._for_target

    def spoil(table: Table, row: Any, target: Any) -> list[Any]:
        found = plain(table, row, target)
        return _slightly_less(found) if table.name == "inventory_reading" else found

    monkeypatch.setattr(moving, "_for_target", spoil)
    with pytest.raises(CommandError, match="inventory_reading does not hold the same"):
        laptop.run("move_up", server.url)
    _require_nothing_happened(laptop, server, before)


def test_the_source_is_held_still_for_the_whole_copy(
    laptop: House, server: House, monkeypatch: pytest.MonkeyPatch
) -> None:
    refused: list[str] = []
    plain = moving._require_equal

    def write(*arguments: Any) -> None:
        with sqlite3.connect(file_of(laptop), timeout=0) as other:
            try:
                other.execute("UPDATE inventory_place SET name = 'moved'")
            except sqlite3.OperationalError as error:
                refused.append(str(error))
        other.close()
        plain(*arguments)

    monkeypatch.setattr(moving, "_require_equal", write)
    laptop.run("move_up", server.url)
    assert refused == ["database is locked"] * len(tables_in_order())
    assert _rows(server)["inventory.Place"] == _rows(laptop)["inventory.Place"]


def test_a_wrong_book_is_not_moved(laptop: House, server: House) -> None:
    with laptop.entered(), connection.cursor() as cursor:
        cursor.execute("UPDATE inventory_balance SET on_hand = on_hand + 1 WHERE bottle_id = 1")
    before = _rows(laptop)
    with pytest.raises(CommandError, match=r"This database has 1 fault\(s\)"):
        laptop.run("move_up", server.url)
    _require_nothing_happened(laptop, server, before)


def test_only_from_sqlite_and_only_to_a_server_that_answers(
    laptop: House, server: House, build: Builder
) -> None:
    before = _rows(laptop)
    for url, told in [
        ("sqlite:////tmp/other", "Name the target as postgresql://"),
        (server.url.replace("labplan_test", "missing"), "cannot be reached"),
    ]:
        with pytest.raises(CommandError, match=told):
            laptop.run("move_up", url)
    with pytest.raises(CommandError, match="is not SQLite"):
        server.run("move_up", build.postgresql().url)
    with pytest.raises(CommandError, match=r"'manage\.py migrate' first"):
        build.sqlite().run("move_up", server.url)
    assert _rows(laptop) == before
    assert _tables(server) == set()


def test_what_was_planned_keeps_its_document(laptop: House, server: House) -> None:
    with laptop.entered():
        planned = dict(Procedure.objects.values_list("code", "document__sha256"))
    laptop.run("move_up", server.url)
    with server.entered():
        assert dict(Procedure.objects.values_list("code", "document__sha256")) == planned


def test_nothing_is_lost_where_one_batch_ends_and_the_next_begins(
    laptop: House, server: House, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = _rows(laptop)
    monkeypatch.setattr(moving, "FIRST_BATCH", 1)
    monkeypatch.setattr(moving, "LARGEST_BATCH", 22)  # 66 bottles: the last batch is full
    laptop.run("move_up", server.url)
    assert _rows(server) == before
