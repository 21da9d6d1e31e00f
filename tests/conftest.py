"""What every test stands on: markers from fixtures, an empty book, a clock, the demo laboratory."""

from collections.abc import Iterator
from datetime import UTC, datetime
from typing import Any

import pytest
from django.db import connection
from django.test import TransactionTestCase

from labplan.base import append_only, clock
from tests.laboratory import Laboratory, open_laboratory

NOON = datetime(2026, 12, 1, 12, 0, tzinfo=UTC)
_DATABASE_FIXTURES = {"db", "transactional_db", "django_db_reset_sequences", "lab", "live_lab"}


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Mark a test `db` or `unit` by what it uses, so that "fast" is computed, not remembered."""
    for item in items:
        uses = set(getattr(item, "fixturenames", ())) & _DATABASE_FIXTURES
        is_db = bool(uses) or item.get_closest_marker("django_db") is not None
        item.add_marker("db" if is_db else "unit")


@pytest.fixture(scope="session", autouse=True)
def _flush_past_the_triggers() -> Iterator[None]:
    """Emptying the tables after a transactional test is the one thing the triggers must allow."""
    plain = TransactionTestCase._fixture_teardown

    def teardown(self: Any) -> None:
        with append_only.lifted(connection):
            plain(self)

    TransactionTestCase._fixture_teardown = teardown  # type: ignore[method-assign]
    yield
    TransactionTestCase._fixture_teardown = plain  # type: ignore[method-assign]


@pytest.fixture(autouse=True)
def _standing_clock() -> Iterator[None]:
    with clock.replaced_by(clock.standing_at(NOON)):
        yield


@pytest.fixture(autouse=True)
def _book_adds_up(request: pytest.FixtureRequest) -> Iterator[None]:
    """After every test on the database the books are re-added, unless it spoils them on purpose."""
    uses_database = request.node.get_closest_marker("db") is not None
    if not uses_database:
        yield
        return
    live = request.node.get_closest_marker("django_db")
    is_live = bool(live and live.kwargs.get("transaction")) or "live_lab" in request.fixturenames
    request.getfixturevalue("transactional_db" if is_live else "db")
    yield
    if request.node.get_closest_marker("spoils_the_book") is None:
        from inventory.services.verify import verify_ledger

        assert verify_ledger().faults == ()


@pytest.fixture
def lab(db: None) -> Laboratory:
    """The demo laboratory in the test's own transaction; durable services need `live_lab`."""
    return open_laboratory()


@pytest.fixture
def live_lab(transactional_db: None) -> Laboratory:
    """The demo laboratory, committed: for durable services, threads and other processes."""
    return open_laboratory()
