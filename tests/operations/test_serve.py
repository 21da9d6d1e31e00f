"""`make serve` as a person uses it: one address, a token, a request that is waited for, Ctrl-C."""

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.laboratory import PROCEDURES, octyl_order
from tests.services.live_work import is_alive

ROOT = Path(__file__).resolve().parents[2]
LIMIT_S = 60
FILL = "import django; django.setup(); from tests.laboratory import open_laboratory as o; o()"


class Served:
    """One running `manage.py serve` on a data folder of its own."""

    def __init__(self, folder: Path, *arguments: str, **environment: str) -> None:
        self.environment = {
            **{k: v for k, v in os.environ.items() if k not in ("DATABASE_URL", "REDIS_URL")},
            "DJANGO_SETTINGS_MODULE": "labplan.settings.default",
            "LABPLAN_DATA_DIR": str(folder), "LABPLAN_LOG": "json", "PYTHONUNBUFFERED": "1",
            **environment,
        }  # fmt: skip
        self.port = _free_port()
        self.process = subprocess.Popen(
            [sys.executable, "manage.py", "serve", "--port", str(self.port), *arguments],
            cwd=ROOT, env=self.environment, text=True,
            stdout=subprocess.PIPE, stderr=(folder / "log").open("w"),
        )  # fmt: skip

    def read_until(self, words: str) -> str:
        """What it prints until a line has these words."""
        assert self.process.stdout is not None
        said = ""
        for line in self.process.stdout:
            said += line
            if words in line:
                return said
        raise AssertionError(f"it ended without {words!r}: {said}")

    def python(self, *arguments: str) -> str:
        ended = subprocess.run(
            [sys.executable, *arguments], cwd=ROOT, env=self.environment, text=True,
            capture_output=True, check=True,
        )  # fmt: skip
        return ended.stdout.strip()

    def family(self) -> list[int]:
        """All processes that descend from it."""
        listed = subprocess.run(
            ["ps", "-eo", "pid=,ppid="], capture_output=True, text=True, check=True
        )
        pairs = [tuple(map(int, line.split())) for line in listed.stdout.splitlines()]
        found = [self.process.pid]
        for pid in found:
            found += [child for child, parent in pairs if parent == pid]
        return found

    def ask(self, path: str, token: str, body: Any = None, **headers: str) -> Any:
        request = urllib.request.Request(
            f"http://127.0.0.1:{self.port}{path}",
            data=json.dumps(body).encode() if body is not None else None,
            headers={
                "Authorization": f"Bearer {token}", "Content-Type": "application/json", **headers,
            },
        )  # fmt: skip
        return urllib.request.urlopen(request, timeout=LIMIT_S)


def _free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port: int = listener.getsockname()[1]
        return port


def _command_of(pid: int) -> str:
    listed = subprocess.run(
        ["ps", "-o", "comm=", "-p", str(pid)], capture_output=True, text=True, check=False
    )
    return listed.stdout


def _gone(pids: list[int]) -> bool:
    give_up = time.monotonic() + LIMIT_S
    while any(is_alive(pid) for pid in pids):
        if time.monotonic() > give_up:
            return False
        time.sleep(0.05)
    return True


@pytest.fixture
def served(tmp_path: Path) -> Iterator[Served]:
    running = Served(tmp_path, "--workers", "1", "--web", "1")
    try:
        yield running
    finally:
        family = running.family()
        running.process.kill()
        running.process.wait()
        assert _gone(family)


def test_a_person_starts_it_gets_a_token_asks_waits_and_stops_it(served: Served) -> None:
    said = served.read_until("create_token")
    assert re.findall(r"http://\S+", said) == [f"http://127.0.0.1:{served.port}"]
    assert "manage.py create_person KIM" in said
    served.python("-c", FILL)
    token = served.python("manage.py", "create_token", "MIRA", "--name", "laptop")

    with served.ask(PROCEDURES, token, octyl_order(), **{"Idempotency-Key": "serve-0001"}) as got:
        assert got.status == 202
        path = got.headers["Location"]
    with served.ask(path, token, Prefer="wait=10") as got:
        procedure = json.load(got)
        assert got.headers["Preference-Applied"] == "wait=10"
    # On which day this runs decides what is in date; that it is settled does not depend on it.
    assert procedure["state"] in {"planned", "short"}
    assert procedure["progress"]["queued_before"] is None
    with served.ask(f"{path}sheet.pdf", token) as got:
        assert got.read(5) == b"%PDF-"
    with served.ask("/health/ready/", "") as got:
        assert got.status == 200
    with served.ask("/metrics", "") as got:
        counted = got.read().decode()
    assert 'labplan_outbox_runs_total{outcome="done",topic="procedure.plan"} 1.0' in counted

    family = served.family()
    assert len(family) >= 8
    served.process.send_signal(signal.SIGINT)
    assert served.process.wait(timeout=LIMIT_S) == 0
    assert served.process.stdout is not None
    assert served.process.stdout.read().endswith("Stopped.\n")
    assert _gone(family)


def test_a_broker_that_dies_is_started_again_and_what_waits_is_planned(served: Served) -> None:
    served.read_until("create_token")
    served.python("-c", FILL)
    token = served.python("manage.py", "create_token", "MIRA", "--name", "laptop")
    [broker] = [pid for pid in served.family() if "valkey-server" in _command_of(pid)]
    os.kill(broker, signal.SIGKILL)
    with served.ask(PROCEDURES, token, octyl_order(), **{"Idempotency-Key": "serve-0002"}) as got:
        path = got.headers["Location"]
    give_up = time.monotonic() + LIMIT_S
    state = "queued"
    while state == "queued" and time.monotonic() < give_up:
        with served.ask(path, token, Prefer="wait=10") as got:
            state = json.load(got)["state"]
    assert state in {"planned", "short"}


@pytest.mark.skipif(sys.platform != "linux", reason="only Linux ends children with their parent")
def test_what_it_started_ends_with_it_when_it_is_killed(served: Served) -> None:
    served.read_until("create_token")
    family = served.family()
    assert len(family) >= 8
    served.process.kill()
    served.process.wait()
    assert _gone(family)


@pytest.mark.parametrize(
    ("arguments", "environment", "words"),
    [
        (["--port", "70000"], {}, "70000 cannot be served on"),
        (["--workers", "0"], {}, "--workers takes 1 to 64"),
        ([], {"DATABASE_URL": "sqlite:///{}/another.sqlite3"}, "run 'manage.py migrate'"),
        ([], {"LABPLAN_LEASE_S": "soon"}, "LABPLAN_LEASE_S='soon'"),
        ([], {"LABPLAN_LOG": "loud"}, "LABPLAN_LOG"),
        ([], {"REDIS_URL": "redis://127.0.0.1:1/0"}, "does not answer"),
    ],
)
def test_what_it_cannot_do_is_said_at_once(
    tmp_path: Path, arguments: list[str], environment: dict[str, str], words: str
) -> None:
    given = {name: value.format(tmp_path) for name, value in environment.items()}
    served = Served(tmp_path, *arguments, **given)
    assert served.process.wait(timeout=LIMIT_S) == 1
    assert words in (tmp_path / "log").read_text()
    assert not (tmp_path / "labplan.sqlite3").exists()


def test_a_port_that_is_taken_is_refused(tmp_path: Path) -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        served = Served(tmp_path, "--port", str(taken.getsockname()[1]))
        assert served.process.wait(timeout=LIMIT_S) == 1
    assert "cannot be served on" in (tmp_path / "log").read_text()
