"""The waiting service as it is run: a program with arguments, that needs nothing else."""

import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.operations.servers import (
    CEILING_S,
    ROOT,
    Client,
    later,
    scripted_web,
    service_process,
    until,
)
from tests.operations.test_passing import Recorder

QUEUED = b"HTTP/1.1 200 OK\r\nRetry-After: 1\r\nContent-Length: 6\r\n\r\nqueued"


@pytest.fixture
def recorder() -> Recorder:
    return Recorder(QUEUED)


@pytest.fixture
def web(recorder: Recorder, short_folder: Path) -> Iterator[str]:
    with scripted_web(short_folder, recorder) as address:
        yield address


@pytest.mark.parametrize("how", [signal.SIGTERM, signal.SIGINT])
def test_told_to_end_it_gives_all_who_wait_the_present_answer(
    how: signal.Signals, web: str, recorder: Recorder
) -> None:
    with service_process("--listen", "127.0.0.1:0", "--web", web) as (process, address):
        client = Client(address)
        held = [later(lambda: client.get("/procedures/P-1/", Prefer="wait=10")) for _ in range(5)]
        until(lambda: len(recorder.heads) > 5)  # the second looks have begun
        assert all(one.is_waiting for one in held)
        process.send_signal(how)
        answers = [one.answer() for one in held]
        assert process.wait(CEILING_S) == 0
    assert [(a.status, a.body, a["Retry-After"]) for a in answers] == [(200, b"queued", "1")] * 5
    with pytest.raises(ConnectionError):
        client.get("/")


def test_a_web_service_that_hangs_does_not_keep_it_from_ending(short_folder: Path) -> None:
    def reply(head: bytes, connection: object) -> None:
        begun.append(head)
        until(lambda: done)

    begun: list[bytes] = []
    done: list[bool] = []
    with (
        scripted_web(short_folder, reply) as web,
        service_process("--listen", "127.0.0.1:0", "--web", web) as (process, address),
    ):
        later(lambda: Client(address).get("/"))
        until(lambda: begun)
        process.terminate()
        assert process.wait(CEILING_S) == 0
        done.append(True)


def test_it_listens_on_a_unix_socket_and_takes_it_away_at_the_end(
    web: str, recorder: Recorder, short_folder: Path
) -> None:
    socket = short_folder / "front.sock"
    socket_address = f"unix:{socket}"
    with service_process("--listen", socket_address, "--web", web) as (process, address):
        assert address == socket_address
        assert Client(address).get("/", X_Forwarded_For="192.0.2.7").body == b"queued"
        process.terminate()
        assert process.wait(CEILING_S) == 0
    assert recorder.header("X-Forwarded-For") == ["192.0.2.7"]
    assert not socket.exists()


def test_an_address_that_is_taken_is_said_to_be(web: str) -> None:
    with service_process("--listen", "127.0.0.1:0", "--web", web) as (_, address):
        place = address.removeprefix("http://")
        second = run("--listen", place, "--web", web)
    assert second.returncode == 1
    assert second.stderr.splitlines()[-1].startswith(f"{place} cannot be listened on: ")


@pytest.mark.parametrize(
    "arguments",
    [
        ["--listen", "8000", "--web", "unix:/x"],
        ["--listen", "127.0.0.1:port", "--web", "unix:/x"],
        ["--listen", "127.0.0.1:0", "--web", "/x"],
        ["--listen", "127.0.0.1:0", "--web", "https://lab.example"],
        ["--listen", "127.0.0.1:0", "--web", "http://127.0.0.1:80/path"],
        ["--listen", "127.0.0.1:0", "--web", "unix:/x", "--broker", "amqp://x"],
        ["--listen", "127.0.0.1:0", "--web", "unix:/x", "--most-waiting", "-1"],
        ["--web", "unix:/x"],
    ],
)
def test_arguments_that_cannot_be_meant_are_refused(arguments: list[str]) -> None:
    refused = run(*arguments)
    assert refused.returncode == 2
    assert "usage: python -m labplan.operations.waiting" in refused.stderr


def run(*arguments: str) -> "subprocess.CompletedProcess[str]":
    return subprocess.run(
        [sys.executable, "-m", "labplan.operations.waiting", *arguments],
        cwd=ROOT, capture_output=True, text=True, timeout=CEILING_S, check=False,
    )  # fmt: skip


def test_it_loads_neither_django_nor_chemistry() -> None:
    """It starts in a moment, stays small, and has no database to hold a connection to."""
    looked = (
        "import sys, labplan.operations.waiting.server as _; "
        "print(*sorted({name.partition('.')[0] for name in sys.modules} & "
        "{'django', 'rest_framework', 'celery', 'rdkit', 'psycopg', 'sqlite3', 'aiohttp'}))"
    )
    ended = subprocess.run(
        [sys.executable, "-c", looked], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert ended.stdout.split() == ["aiohttp"]
