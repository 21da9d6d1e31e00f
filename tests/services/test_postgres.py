"""The test server really starts, serves, and leaves nothing behind, however its user ends."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from urllib.parse import parse_qs, urlsplit

import psycopg
import pytest

from tests.services import postgres
from tests.services.postgres import PostgresUnavailableError, running_postgres

pytestmark = pytest.mark.live

ROOT = Path(__file__).parents[2]
GONE_LIMIT_S = 30
HOLD_A_SERVER = (
    "import time\n"
    "from tests.services.postgres import running_postgres\n"
    "with running_postgres() as url:\n"
    "    print(url, flush=True)\n"
    "    time.sleep(600)\n"
)


def socket_folder(url: str) -> Path:
    return Path(parse_qs(urlsplit(url).query)["host"][0])


def server_process(url: str) -> int:
    pid_file = socket_folder(url).parent / "data" / "postmaster.pid"
    return int(pid_file.read_text().splitlines()[0])


def is_alive(process: int) -> bool:
    """Whether a process runs; one that ended and waits to be collected by its parent does not."""
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    status = Path(f"/proc/{process}/status")
    return not (status.exists() and "State:\tZ" in status.read_text())


def wait_until_gone(folder: Path, process: int) -> None:
    give_up = time.monotonic() + GONE_LIMIT_S
    while (folder.exists() or is_alive(process)) and time.monotonic() < give_up:
        time.sleep(0.05)
    assert not folder.exists()
    assert not is_alive(process)


def test_server_starts_answers_and_leaves_nothing_behind():
    with running_postgres() as url:
        folder, process = socket_folder(url).parent, server_process(url)
        with psycopg.connect(url) as connection:
            (version,) = connection.execute("SELECT version()").fetchone()
            (encoding,) = connection.execute("SHOW server_encoding").fetchone()
            (addresses,) = connection.execute("SHOW listen_addresses").fetchone()
            (order,) = connection.execute(
                "SELECT datcollate FROM pg_database WHERE datname = current_database()"
            ).fetchone()
        assert version.startswith("PostgreSQL ")
        assert (encoding, addresses, order) == ("UTF8", "", "C.UTF-8")
        assert is_alive(process)
        assert folder.stat().st_mode & 0o077 == 0
    wait_until_gone(folder, process)


def test_two_servers_at_once_do_not_share_anything():
    with running_postgres() as first, running_postgres() as second:
        assert socket_folder(first) != socket_folder(second)
        with psycopg.connect(first) as connection:
            connection.execute("CREATE TABLE only_in_first ()")
        with psycopg.connect(second) as connection:
            (table,) = connection.execute("SELECT to_regclass('only_in_first')").fetchone()
        assert table is None


def test_an_error_in_the_block_passes_through_and_the_server_goes():
    seen = {}

    def use_and_fail():
        with running_postgres() as url:
            seen.update(folder=socket_folder(url).parent, process=server_process(url))
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        use_and_fail()
    wait_until_gone(**seen)


@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGTERM, signal.SIGINT])
def test_server_goes_when_the_process_using_it_is_stopped(how):
    with subprocess.Popen(
        [sys.executable, "-c", HOLD_A_SERVER],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    ) as user:
        url = user.stdout.readline().strip()
        folder, process = socket_folder(url).parent, server_process(url)
        assert is_alive(process)
        user.send_signal(how)
    wait_until_gone(folder, process)


def test_a_long_folder_for_temporary_files_is_passed_over(monkeypatch, tmp_path):
    long_folder = tmp_path / ("x" * 100)
    long_folder.mkdir()
    monkeypatch.setattr(postgres.tempfile, "tempdir", str(long_folder))
    with running_postgres() as url:
        assert len(os.fsencode(socket_folder(url) / ".s.PGSQL.5432")) < 100
        with psycopg.connect(url) as connection:
            assert connection.execute("SELECT 1").fetchone() == (1,)


def test_without_server_programs_the_refusal_says_what_to_do(monkeypatch, tmp_path):
    monkeypatch.setattr(postgres, "wheel_package", lambda: None)
    monkeypatch.setattr(postgres, "system_binaries", lambda: None)
    with pytest.raises(PostgresUnavailableError, match="set DATABASE_URL"), running_postgres():
        pytest.fail("there is nothing to start")


def test_a_failing_program_shows_what_it_said(monkeypatch, tmp_path):
    monkeypatch.setattr(postgres, "DATABASE_USER", "pg_not_allowed")
    with pytest.raises(PostgresUnavailableError, match=r"pg_not_allowed"), running_postgres():
        pytest.fail("the server must not start")
