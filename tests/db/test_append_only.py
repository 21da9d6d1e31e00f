"""Movements, events and documents: what is written stays, whoever asks and however."""

import io
import uuid
from collections.abc import Callable
from datetime import date
from typing import Any

import pytest
from django.core.management import call_command
from django.db import DatabaseError, connection, models, transaction

from inventory.models import Movement
from labplan.base import append_only, clock
from labplan.base.events import record_event
from labplan.base.models import Event, Seal, SealRun
from labplan.base.seal import seal_new
from labplan.procedures.models import Document, Procedure
from tests.db.bench import (
    ON_POSTGRESQL,
    Shelf,
    drop_trigger,
    insert,
    make_shelf,
    rows_of,
    run_sql,
    trigger_names,
)

pytestmark = pytest.mark.django_db
KINDS: tuple[type[models.Model], ...] = (Movement, Event, Document, Seal, SealRun)
TABLES = ("base_event", "base_seal", "base_sealrun", "inventory_movement", "procedures_document")
KEYS = {table: "number" if table == "base_seal" else "id" for table in TABLES}
VERBS = ("no_change", "no_truncate") if ON_POSTGRESQL else ("no_update", "no_delete")
# tables whose new rows must fit the one before
CARRYING_ON = ("base_seal", "base_sealrun", "inventory_movement")
ALL_TRIGGERS = {
    *(f"{table}_{verb}" for table in TABLES for verb in VERBS),
    *(f"{table}_carries_on" for table in CARRYING_ON),
}
A_COLUMN = {
    "base_event": "kind", "inventory_movement": "reason", "procedures_document": "sha256",
    "base_seal": "key_print", "base_sealrun": "book",
}  # fmt: skip


@pytest.fixture
def shelf() -> Shelf:
    """One row of each kind that never changes, and more than one movement."""
    shelf = make_shelf(A=100_000, B=100_000)
    shelf.hold(("A", 1_000))
    record_event(actor_code="LEAD", kind="a.kind", subject="a thing")
    procedure = Procedure.objects.create(
        code="P-1", project=shelf.project, requested_by="LEAD", target_smiles="C",
        product_mass_mg=1, state="queued", created_at=clock.now(),
    )  # fmt: skip
    Document.objects.create(
        procedure=procedure, attempt=1, body=b"{}", sha256="0" * 64, created_at=clock.now()
    )
    seal_new()
    if ON_POSTGRESQL:
        # A table with foreign keys still to be checked may be neither emptied nor altered.
        run_sql("SET CONSTRAINTS ALL IMMEDIATE")
    return shelf


def _everything() -> list[list[tuple[Any, ...]]]:
    return [rows_of(f"SELECT * FROM {table} ORDER BY 1") for table in TABLES]


def _refused(call: Callable[[], Any], words: str) -> None:
    before = _everything()
    assert all(before)
    with pytest.raises(DatabaseError, match=words), transaction.atomic():
        call()
    assert _everything() == before


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize("table", TABLES)
@pytest.mark.parametrize(
    "sql",
    [
        "UPDATE {table} SET {column} = 'x'",
        "UPDATE {table} SET {column} = {column}",
        "UPDATE {table} SET {key} = {key} + 1000",
        "DELETE FROM {table}",
        "DELETE FROM {table} WHERE {key} = (SELECT max({key}) FROM {table})",
    ],
)
def test_raw_sql_changes_no_row(table: str, sql: str) -> None:
    text = sql.format(table=table, column=A_COLUMN[table], key=KEYS[table])
    _refused(lambda: run_sql(text), f"rows of {table} are never changed")


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize("table", TABLES)
def test_the_table_is_not_emptied_nor_its_rows_replaced(table: str) -> None:
    words = f"rows of {table} are never changed"
    if ON_POSTGRESQL:
        _refused(lambda: run_sql(f"TRUNCATE {table} CASCADE"), words)
        return
    columns = [name for _, name, *_ in rows_of(f"PRAGMA table_info({table})")]
    row = dict(zip(columns, rows_of(f"SELECT * FROM {table} ORDER BY 1 DESC")[0], strict=True))
    row[A_COLUMN[table]] = "x"
    _refused(lambda: insert(table, row, verb="INSERT OR REPLACE"), _words_to_a_row_again(table))


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize("table", TABLES)
def test_an_upsert_changes_no_row(table: str) -> None:
    """On both databases the conflict turns into an update, which the trigger refuses."""
    columns = ", ".join(f'"{f.column}"' for f in _model_of(table)._meta.concrete_fields)
    upsert = (
        f"INSERT INTO {table} ({columns}) SELECT {columns} FROM {table} WHERE {KEYS[table]} = "
        f"(SELECT max({KEYS[table]}) FROM {table}) "
        f"ON CONFLICT ({KEYS[table]}) DO UPDATE SET {A_COLUMN[table]} = 'x'"
    )
    _refused(lambda: run_sql(upsert), _words_to_a_row_again(table))


def _words_to_a_row_again(table: str) -> str:
    """A seal that is there already does not carry on from the newest one: that comes first."""
    words = f"rows of {table} are never changed"
    return f"{words}|does not carry on|covers what is sealed" if "seal" in table else words


def _model_of(table: str) -> type[models.Model]:
    return next(kind for kind in KINDS if kind._meta.db_table == table)


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("way", ["update", "delete", "save", "delete one", "base manager"])
def test_the_models_refuse_before_the_database_is_asked(kind: Any, way: str) -> None:
    row = kind.objects.first()
    to = {"number" if kind is Seal else "id": 5}
    calls: dict[str, Callable[[], Any]] = {
        "update": lambda: kind.objects.update(**to),
        "delete": lambda: kind.objects.filter(pk=row.pk).delete(),
        "save": row.save,
        "delete one": row.delete,
        "base manager": lambda: kind.objects.filter(pk=row.pk).update(**to),
    }
    before = _everything()
    with pytest.raises(TypeError, match=f"{kind.__name__} rows are never"):
        calls[way]()
    assert _everything() == before


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize("way", ["bulk_update", "force_update", "plain queryset"])
def test_ways_round_the_models_end_at_the_triggers(way: str) -> None:
    row = Movement.objects.first()
    assert row is not None
    row.reason = "x"
    calls: dict[str, Callable[[], Any]] = {
        "bulk_update": lambda: models.QuerySet(Movement).bulk_update([row], ["reason"]),
        "force_update": lambda: row.save_base(force_update=True),
        "plain queryset": lambda: models.QuerySet(Movement).update(reason="x"),
    }
    _refused(calls[way], "rows of inventory_movement are never changed")


def _next_line(shelf: Shelf, **changes: Any) -> dict[str, Any]:
    """A sound second line of bottle B (100,000 on hand, line 1), with values replaced."""
    return {
        "bottle_id": shelf.bottle("B").pk, "seq": 2, "kind": "correction", "on_hand_change": 5,
        "held_change": 0, "on_hand_after": 100_005, "held_after": 0, "entered_amount": "5",
        "entered_unit": "ug", "density_source": "", "operation": uuid.uuid4().hex, "part": 1,
        "actor_code": "A", "reason": "",
        "booked_on": date(2026, 12, 1), "recorded_at": clock.now(), **changes,
    }  # fmt: skip


@pytest.mark.parametrize(
    "changes",
    [
        {"seq": 3},
        {"seq": 4},
        {"seq": 1},
        {"seq": 2, "on_hand_after": 100_006},
        {"on_hand_after": 100_004},
        {"on_hand_change": -5},
        {"held_after": 1},
        {"held_change": -1},
    ],
    ids=str,
)
def test_a_line_that_does_not_carry_on_is_refused(shelf: Shelf, changes: dict[str, Any]) -> None:
    row = _next_line(shelf, **changes)
    _refused(lambda: insert("inventory_movement", row), "does not carry on")


def test_a_first_line_starts_from_nothing_and_at_one(shelf: Shelf) -> None:
    """In a book without lines: neither another number nor a sum brought along."""
    bottle = shelf.bottle("B")
    bottle.pk = None
    bottle.code = "C"
    bottle.save(force_insert=True)
    for changes in ({"seq": 2}, {"seq": 1, "on_hand_after": 6}, {"seq": 1, "held_after": 1}):
        row = _next_line(shelf, bottle_id=bottle.pk, on_hand_after=5)
        _refused(
            lambda row=row, changes=changes: insert("inventory_movement", {**row, **changes}),
            "does not carry on",
        )


def test_a_line_that_carries_on_is_taken(shelf: Shelf) -> None:
    with transaction.atomic():
        insert("inventory_movement", _next_line(shelf))
        assert Movement.objects.filter(bottle__code="B").count() == 2
        transaction.set_rollback(True)


def test_every_trigger_is_in_the_catalogue_after_migrate() -> None:
    assert append_only.append_only_tables() == list(TABLES)
    assert trigger_names() == ALL_TRIGGERS


def test_triggers_lost_in_a_table_rebuild_come_back_with_migrate(shelf: Shelf) -> None:
    """SQLite drops them when a migration rebuilds the table: here they are dropped by hand."""
    for table in TABLES:
        for verb in VERBS:
            drop_trigger(table, f"{table}_{verb}")
    for table in CARRYING_ON:
        drop_trigger(table, f"{table}_carries_on")
    assert trigger_names() == set()
    call_command("migrate", verbosity=0, stdout=io.StringIO())
    assert trigger_names() == ALL_TRIGGERS
    _refused(lambda: run_sql("DELETE FROM base_event"), "rows of base_event are never changed")
    row = _next_line(shelf, seq=3)
    _refused(lambda: insert("inventory_movement", row), "does not carry on")


def test_a_rebuilt_table_gets_its_triggers_back(shelf: Shelf) -> None:
    """A real schema change by Django's own editor, which on SQLite makes the table anew."""
    field = Event._meta.get_field("kind")
    wider = models.CharField(max_length=61)
    wider.set_attributes_from_name("kind")
    wider.model = Event
    if ON_POSTGRESQL:
        with connection.schema_editor() as editor:
            editor.alter_field(Event, field, wider)
        assert trigger_names() == ALL_TRIGGERS
    else:
        statement = rows_of("SELECT sql FROM sqlite_master WHERE name = 'base_event'")[0][0]
        run_sql("ALTER TABLE base_event RENAME TO old_event")
        run_sql(statement)
        run_sql("INSERT INTO base_event SELECT * FROM old_event")
        run_sql("DROP TABLE old_event")
        assert "base_event_no_update" not in trigger_names()
    append_only.install_all(using="default")
    assert trigger_names() == ALL_TRIGGERS
    _refused(lambda: run_sql("DELETE FROM base_event"), "rows of base_event are never changed")


@pytest.mark.spoils_the_book
def test_lifting_is_for_the_block_only(shelf: Shelf) -> None:
    with append_only.lifted(connection):
        assert trigger_names() == {f"{table}_carries_on" for table in CARRYING_ON}
        run_sql("UPDATE base_event SET kind = 'x'")
    assert trigger_names() == ALL_TRIGGERS
    assert set(Event.objects.values_list("kind", flat=True)) == {"x"}
    _refused(lambda: run_sql("DELETE FROM base_event"), "rows of base_event are never changed")


def _next_seal(**changes: Any) -> dict[str, Any]:
    """What the database takes for the seal after the first, with values replaced."""
    first = Seal.objects.get(number=1)
    return {
        "number": 2, "sealed_at": clock.now(), "key_print": "p", "before": first.digest,
        "runs": 1, "rows": 1, "digest": "a" * 64, **changes,
    }  # fmt: skip


@pytest.mark.usefixtures("shelf")
@pytest.mark.parametrize(
    "changes",
    [{"number": 3}, {"number": 1, "before": "0" * 64}, {"before": "0" * 64}, {"before": "b" * 64}],
    ids=str,
)
def test_a_seal_that_does_not_carry_on_is_refused(changes: dict[str, Any]) -> None:
    row = _next_seal(**changes)
    _refused(lambda: insert("base_seal", row), "does not carry on")


@pytest.mark.usefixtures("shelf")
def test_a_second_seal_of_one_number_is_refused() -> None:
    with transaction.atomic():
        insert("base_seal", _next_seal())
        _refused(lambda: insert("base_seal", _next_seal(digest="c" * 64)), "(?i)unique")
        transaction.set_rollback(True)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"first": 1, "last": 1}, "covers what is sealed"),
        ({"first": 2, "last": 3}, "covers what is sealed"),
        ({"first": 1, "last": 9}, "covers what is sealed"),
    ],
    ids=str,
)
def test_a_run_covers_only_what_is_new(shelf: Shelf, changes: dict[str, Any], words: str) -> None:
    """Lines 1 and 2 of bottle A are sealed."""
    row = {
        "seal_id": 2, "book": "stock", "subject": shelf.bottle("A").pk, "first": 3, "last": 3,
        "digest": "a" * 64, **changes,
    }  # fmt: skip
    row["marks"] = "0" * 8 * (row["last"] - row["first"] + 1)
    with transaction.atomic():
        insert("base_seal", _next_seal())
        _refused(lambda: insert("base_sealrun", row), words)
        insert("base_sealrun", {**row, "seal_id": 2, "first": 3, "last": 3, "marks": "0" * 8})
        transaction.set_rollback(True)
