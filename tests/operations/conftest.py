"""Short folders for sockets, and the real things around the service."""

import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

from labplan.operations.broker_server import BrokerServer, running_broker


@pytest.fixture
def short_folder() -> Iterator[Path]:
    """A socket's path has to be short; pytest's own folders are not."""
    with tempfile.TemporaryDirectory(prefix="labplan-w-") as folder:
        yield Path(folder)


@pytest.fixture
def broker() -> Iterator[BrokerServer]:
    with running_broker() as server:
        yield server
