"""What the database tests share: a small shelf, raw SQL, threads with their own connections."""

import threading
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from datetime import date
from typing import Any
from urllib.parse import quote

from django.db import connection, connections, transaction

from inventory.models import (
    Balance,
    Bottle,
    Form,
    Hold,
    Movement,
    Place,
    Reading,
    Reservation,
    Substance,
)
from inventory.services import BottleReceipt, HoldLine, hold_lines, receive_bottles
from labplan.base import clock
from labplan.base.models import Event, Membership, Person, Project
from labplan.base.rights import Actor, actor_for

ON_POSTGRESQL = connection.vendor == "postgresql"
HEEL_UG = 20_000  # of a weighed bottle
THREAD_LIMIT_S = 60


@dataclass(frozen=True)
class Shelf:
    """A project with one person a role, and weighed bottles of one material."""

    project: Project

    def actor(self, role: str = "chemist") -> Actor:
        return actor_for(Person.objects.get(code=role.upper()))

    def bottle(self, code: str) -> Bottle:
        return Bottle.objects.select_related("balance").get(code=code)

    def balance(self, code: str) -> tuple[int, int, int]:
        """On hand, held, number of the last line."""
        row = Balance.objects.get(bottle__code=code)
        return row.on_hand, row.held, row.seq

    def hold(self, *lines: tuple[str, int], role: str = "chemist") -> Reservation:
        """Hold in a transaction of its own (or of the test's)."""
        with transaction.atomic():
            return self.hold_here(*lines, role=role)

    def hold_here(self, *lines: tuple[str, int], role: str = "chemist") -> Reservation:
        return hold_lines(
            actor=self.actor(role),
            project_id=self.project.pk,
            purpose="a test",
            expires_on=date(2026, 12, 15),
            lines=[HoldLine(code, amount, f"{amount / 1000:g}", "mg") for code, amount in lines],
        )


def make_shelf(**amounts_ug: int) -> Shelf:
    """`make_shelf(A=100_000)`: one bottle A with 100 mg on hand, of which 20 mg are heel."""
    project = Project.objects.create(code="P1", title="A project", created_at=clock.now())
    for role in Membership.Role.values:
        person = Person.objects.create_user(role.upper())
        Membership.objects.create(person=person, project=project, role=role)
    place = Place.objects.create(code="S1", name="A shelf")
    substance = Substance.objects.create(
        code="powder", kind="material", name="A powder", search_key="a powder"
    )
    shelf = Shelf(project)
    receipts = [
        BottleReceipt(
            code=code, substance=substance, form={"kind": "neat", "label": "neat"}, place=place,
            measured_by="mass", amount=amount, entered_amount=f"{amount / 1000:g}",
            entered_unit="mg",
            fields={"received_on": date(2026, 6, 15), "stabiliser_state": "not_applicable"},
        )
        for code, amount in amounts_ug.items()
    ]  # fmt: skip
    with transaction.atomic():
        receive_bottles(receipts, actor=shelf.actor("stock_keeper"), reason="a test")
    return shelf


def whole_stock() -> list[Any]:
    """Everything that a hold or release could change, to show that a refusal changed nothing."""
    return [
        list(kind.objects.order_by("pk").values_list())
        for kind in (Balance, Reservation, Hold, Movement)
    ]


def received_stock() -> list[Any]:
    """Everything that a receipt writes, to show that a refusal changed nothing."""
    kinds = (Substance, Form, Place, Bottle, Balance, Movement, Reading, Event)
    return [list(kind.objects.order_by("pk").values_list()) for kind in kinds]


def run_sql(sql: str, parameters: Sequence[Any] = ()) -> None:
    with connection.cursor() as cursor:
        cursor.execute(sql, parameters)


def rows_of(sql: str, parameters: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
    with connection.cursor() as cursor:
        cursor.execute(sql, parameters)
        return list(cursor.fetchall())


def insert(table: str, values: dict[str, Any], *, verb: str = "INSERT") -> None:
    """One row by raw SQL, past the models."""
    columns = ", ".join(f'"{name}"' for name in values)
    marks = ", ".join(["%s"] * len(values))
    run_sql(f'{verb} INTO "{table}" ({columns}) VALUES ({marks})', list(values.values()))


def trigger_names() -> set[str]:
    """The triggers the catalogue of this database knows, PostgreSQL's own left out."""
    if ON_POSTGRESQL:
        return {name for (name,) in rows_of("SELECT tgname FROM pg_trigger WHERE NOT tgisinternal")}
    return {name for (name,) in rows_of("SELECT name FROM sqlite_master WHERE type = 'trigger'")}


def drop_trigger(table: str, name: str) -> None:
    if ON_POSTGRESQL:
        # A table with foreign keys still to be checked may not be altered.
        run_sql("SET CONSTRAINTS ALL IMMEDIATE")
    run_sql(f"DROP TRIGGER {name}" + (f" ON {table}" if ON_POSTGRESQL else ""))


def database_address() -> str:
    """The DATABASE_URL of the database the tests run on, for another process."""
    settings = connection.settings_dict
    if connection.vendor == "sqlite":
        return f"sqlite:///{quote(str(settings['NAME']))}"
    host, port = quote(str(settings["HOST"]), safe=""), settings["PORT"]
    user, password = quote(settings["USER"], safe=""), quote(settings["PASSWORD"], safe="")
    return f"postgresql://{user}:{password}@/{settings['NAME']}?host={host}&port={port}"


def at_once(*calls: Callable[[], Any]) -> list[Any]:
    """Start all calls together, each in a thread with its own connection; results or exceptions."""
    barrier = threading.Barrier(len(calls))
    results: list[Any] = [TimeoutError("the thread did not end")] * len(calls)

    def run(number: int, call: Callable[[], Any]) -> None:
        try:
            barrier.wait(timeout=THREAD_LIMIT_S)
            results[number] = call()
        except Exception as error:
            results[number] = error
        finally:
            connections.close_all()

    threads = [
        threading.Thread(target=run, args=(number, call), daemon=True)
        for number, call in enumerate(calls)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=THREAD_LIMIT_S)
    return results


def codes_of(errors: Iterable[Any]) -> list[tuple[str, str]]:
    """(field, code) of the lines of a refusal."""
    return [(error.field, error.code) for error in errors]
