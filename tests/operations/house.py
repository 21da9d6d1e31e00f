"""Databases of their own for the operator's commands: filled, empty, by file or on the server.

The kind is that of the pass: files on SQLite, databases on the tests' own server on PostgreSQL.
"""

import io
import secrets
import shutil
import threading
import uuid
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from decimal import Decimal
from pathlib import Path
from typing import Any

import psycopg
from django.core.management import call_command
from django.db import connection, connections

from inventory.models import Bottle, Movement, Notice, Quota, Substance
from labplan.base import clock, outbox
from labplan.base.errors import LoginFailed
from labplan.base.login import log_in
from labplan.base.models import OutboxMessage, Person, Project, RememberedAnswer
from labplan.base.rights import actor_for
from labplan.base.seal import seal_new
from labplan.base.tokens import create_token
from labplan.operations.elsewhere import sqlite_url, working_on
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services import ProcedureOrder, request_procedure
from tests.db.bench import ON_POSTGRESQL, database_address
from tests.laboratory import open_laboratory
from tests.targets import OCTYL_GLUCOSIDE

NOON = datetime(2026, 12, 1, 12, 0, tzinfo=UTC)
LIMIT_S = 60


@dataclass(frozen=True)
class House:
    """One installation: its database's address."""

    url: str

    @contextmanager
    def entered(self) -> Iterator[None]:
        """Let everything in this thread work on this database."""
        with working_on(self.url):
            yield

    def run(self, command: str, *arguments: Any, **options: Any) -> str:
        """What a command printed."""
        said = io.StringIO()
        with self.entered():
            call_command(command, *arguments, stdout=said, **options)
        return said.getvalue()

    def state(self) -> dict[str, Any]:
        """Everything that a refusal could have changed: the rows of every table."""
        with self.entered():
            return everything()


def everything() -> dict[str, Any]:
    from labplan.operations.tables import digest_of, tables_in_order

    return {table.name: digest_of(table, "default") for table in tables_in_order()}


def request_one(mass_mg: int = 200) -> Procedure:
    order = ProcedureOrder("LECTIN-07", OCTYL_GLUCOSIDE, product_mass_mg=Decimal(mass_mg))
    return request_procedure(actor=actor_for(Person.objects.get(code="MIRA")), order=order)


def deliver_all() -> int:
    count = 0
    while outbox.deliver_waiting(limit=1):
        count += 1
    return count


def fill() -> None:
    """The demo's laboratory with work done, waiting and on its way; rows in every table but one.

    The one is the outbox's pause.
    """
    call_command("migrate", verbosity=0)
    open_laboratory()
    create_token(person_code="MIRA", name="a laptop")
    RememberedAnswer.objects.create(
        person=Person.objects.get(code="MIRA"), route="x", key="k" * 8, fingerprint="0" * 64,
        status=201, body='{"name": "β-D-Glucose\\n\\t\\\\"}', created_at=clock.now(),
    )  # fmt: skip
    project = Project.objects.get(code="LECTIN-07")
    Quota.objects.create(
        project=project, substance=Substance.objects.get(code="1-octanol"), amount=10**9,
        measured_by="volume", starts_on="2026-12-01", ends_on="2026-12-31", actor_code="JONAS",
        created_at=clock.now(),
    )  # fmt: skip
    Notice.objects.create(
        person_code="MIRA", project=project, kind="hold_cancelled", bottle_code="GPA-1", line=1,
        reservation_code=uuid.UUID(int=7), detail="d", created_at=clock.now(),
    )  # fmt: skip
    with suppress(LoginFailed):
        log_in(person_code="MIRA", password="not this one", address="192.0.2.1")
    for _ in range(2):
        seal_new()  # so that the documents name a seal
        request_one()
        deliver_all()
    for _ in range(2):
        request_one()
    on_its_way = OutboxMessage.objects.filter(state="new").first()
    assert on_its_way is not None
    assert outbox.publish_waiting(lambda message: None, limit=1) == 1


def counted() -> tuple[int, int, int]:
    kinds = (Bottle, Movement, Document)
    return kinds[0].objects.count(), kinds[1].objects.count(), kinds[2].objects.count()


class Builder:
    """Makes databases for tests and takes them away at the end."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._made: list[str] = []

    def empty(self) -> House:
        return self.postgresql() if ON_POSTGRESQL else self.sqlite()

    def copy_of(self, filled: House) -> House:
        if ON_POSTGRESQL:
            return self.postgresql(template=filled.url)
        return self.sqlite(copy=filled)

    def sqlite(self, copy: House | None = None) -> House:
        place = self.folder / secrets.token_hex(4) / "labplan.sqlite3"
        place.parent.mkdir()
        if copy is not None:
            shutil.copy(file_of(copy), place)
        return House(sqlite_url(place))

    def postgresql(self, template: str = "") -> House:
        name = f"labplan_test_{secrets.token_hex(6)}"
        of = (
            f" TEMPLATE {psycopg.conninfo.conninfo_to_dict(template)['dbname']}" if template else ""
        )
        self._administer(f"CREATE DATABASE {name}{of}")
        self._made.append(name)
        return House(_named(name))

    def close(self) -> None:
        while self._made:
            self._administer(f"DROP DATABASE IF EXISTS {self._made.pop()} WITH (FORCE)")

    def _administer(self, sql: str) -> None:
        with psycopg.connect(database_address(), autocommit=True) as server:
            server.execute(sql)  # type: ignore[arg-type]


def _named(name: str) -> str:
    mine = str(connection.settings_dict["NAME"])
    return database_address().replace(f"/{mine}?", f"/{name}?")


def file_of(house: House) -> Path:
    """The SQLite file of a house; one file, since nobody has it open."""
    return Path(house.url.removeprefix("sqlite:///"))


class Traffic:
    """Threads that ask for procedures and plan them until the block ends."""

    MOST = 200  # requests, so that nothing runs for ever

    def __init__(self, house: House) -> None:
        self.house = house
        self.errors: list[Exception] = []
        self.requested = 0
        self._one_more = threading.Condition()
        self._over = threading.Event()

    def __enter__(self) -> "Traffic":
        jobs = (self._request, self._plan, self._plan)
        self._threads = [threading.Thread(target=self._run, args=(job,)) for job in jobs]
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._over.set()
        for thread in self._threads:
            thread.join(timeout=LIMIT_S)
        assert self.errors == []

    def wait_for_more(self, number: int) -> None:
        """Until so many more requests have been committed."""
        with self._one_more:
            wanted = self.requested + number
            arrived = self._one_more.wait_for(
                lambda: self.requested >= wanted or bool(self.errors), timeout=LIMIT_S
            )
            assert arrived, "no request was committed meanwhile"

    def _run(self, job: Any) -> None:
        try:
            with self.house.entered():
                while not self._over.is_set() and self.requested < self.MOST:
                    job()
        except Exception as error:
            self.errors.append(error)
        finally:
            connections.close_all()

    def _request(self) -> None:
        request_one(50)
        with self._one_more:
            self.requested += 1
            self._one_more.notify_all()
        self._over.wait(0.05)

    def _plan(self) -> None:
        if not outbox.deliver_waiting(limit=1):
            self._over.wait(0.01)
