"""The laboratory is loaded once a module and put back to that after every test."""

from collections.abc import Iterator
from typing import Any

import pytest
from django.db import transaction

from labplan.base import clock
from tests.conftest import NOON
from tests.laboratory import Laboratory, open_laboratory


@pytest.fixture(scope="module")
def _loaded(django_db_setup: None, django_db_blocker: Any) -> Iterator[None]:
    """The stock in a transaction around the module; each test's own is a savepoint in it."""
    around = transaction.atomic()
    around._from_testcase = True  # as Django's TestCase does, so that durable services may run
    with django_db_blocker.unblock(), around:
        with clock.replaced_by(clock.standing_at(NOON)):
            open_laboratory()
        yield
        transaction.set_rollback(True)


@pytest.fixture
def lab(_loaded: None, db: None) -> Laboratory:
    return Laboratory()
