"""The web server as deploy/gunicorn.conf.py starts it: health, counts of all workers, one log."""

import http.client
import json
import os
import re
import signal
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from prometheus_client.parser import text_string_to_metric_families

pytestmark = pytest.mark.live
ROOT = Path(__file__).resolve().parents[2]
START_LIMIT_S = 60
LIVE = {"route": "health-live", "method": "GET", "status": "200"}


class OverSocket(http.client.HTTPConnection):
    """HTTP over a Unix socket."""

    def connect(self) -> None:
        self.sock = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        self.sock.settimeout(10)
        self.sock.connect(self.host)


@dataclass
class Server:
    folder: Path
    process: subprocess.Popen[bytes]

    def get(self, path: str, **headers: str) -> tuple[int, dict[str, str], bytes]:
        connection = OverSocket(str(self.folder / "web.sock"))
        try:
            connection.request("GET", path, headers={"Host": "localhost", **headers})
            response = connection.getresponse()
            return response.status, dict(response.getheaders()), response.read()
        finally:
            connection.close()

    def counted(self, **labels: str) -> float:
        text = self.get("/metrics")[2].decode()
        return sum(
            sample.value
            for family in text_string_to_metric_families(text)
            for sample in family.samples
            if sample.name == "labplan_http_requests_total" and sample.labels == labels
        )

    def booted(self) -> list[int]:
        """The workers there have been, oldest first."""
        text = (self.folder / "log").read_text(encoding="utf-8")
        return [int(number) for number in re.findall(r"Booting worker with pid: (\d+)", text)]

    def log(self) -> list[dict[str, object]]:
        """Every single line has to be an object."""
        lines = (self.folder / "log").read_text(encoding="utf-8").splitlines()
        return [json.loads(line) for line in lines]


def wait_until(is_so: Callable[[], bool], what: str) -> None:
    deadline = time.monotonic() + START_LIMIT_S
    while not is_so():
        assert time.monotonic() < deadline, what
        time.sleep(0.05)


@pytest.fixture
def server() -> Iterator[Server]:
    with tempfile.TemporaryDirectory(prefix="labplan-web-") as name:
        folder = Path(name)
        environment = {
            **os.environ,
            "DJANGO_SETTINGS_MODULE": "labplan.settings.default",
            "DATABASE_URL": "", "REDIS_URL": "", "LABPLAN_SECRET_KEY": "for-tests-only",
            "LABPLAN_DATA_DIR": name, "LABPLAN_LOG": "json", "LABPLAN_WEB_WORKERS": "2",
            "LABPLAN_BIND": f"unix:{folder / 'web.sock'}",
            "PROMETHEUS_MULTIPROC_DIR": str(folder / "metrics"),
        }  # fmt: skip
        subprocess.run(
            [sys.executable, "manage.py", "migrate", "--verbosity", "0"],
            cwd=ROOT, env=environment, check=True, timeout=START_LIMIT_S,
        )  # fmt: skip
        with (folder / "log").open("wb") as log:
            process = subprocess.Popen(
                [sys.executable, "-m", "gunicorn", "-c", "deploy/gunicorn.conf.py", "labplan.wsgi"],
                cwd=ROOT, env=environment, stdout=log, stderr=log,
            )  # fmt: skip
        made = Server(folder, process)
        try:
            wait_until(lambda: len(made.booted()) == 2, "no workers were started")
            wait_until((folder / "web.sock").exists, "nothing listens")
            yield made
        finally:
            if process.poll() is None:
                process.kill()
            process.wait(timeout=10)


def test_it_is_ready_counts_over_its_workers_and_writes_one_kind_of_log(server: Server) -> None:
    status, headers, body = server.get("/health/ready/", **{"X-Request-ID": "first"})
    assert (status, json.loads(body)["status"]) == (200, "ready")
    assert headers["X-Request-ID"] == "first"
    assert server.get("/api/v1/procedures/", **{"X-Request-ID": "second"})[0] == 401

    for _ in range(20):
        assert server.get("/health/live/")[0] == 200
    assert server.counted(**LIVE) == 20

    first = server.booted()[0]
    os.kill(first, signal.SIGKILL)
    wait_until(lambda: len(server.booted()) == 3, "the worker was not replaced")
    for _ in range(10):
        assert server.get("/health/live/")[0] == 200
    assert server.counted(**LIVE) == 30
    files = {path.name for path in (server.folder / "metrics").iterdir()}
    assert not [name for name in files if name.endswith(f"-{first}.db")]
    assert [name for name in files if name.endswith("-folded.db")]

    server.process.send_signal(signal.SIGTERM)
    assert server.process.wait(timeout=40) == 0
    lines = server.log()
    answered = [line for line in lines if line["logger"] == "labplan.requests"]
    assert [(line["request_id"], line["status"]) for line in answered] == [("second", 401)]
    assert {line["logger"] for line in lines} == {"gunicorn.error", "labplan.requests"}


def test_a_wrong_number_of_workers_stops_the_start() -> None:
    ended = subprocess.run(
        [sys.executable, "-m", "gunicorn", "-c", "deploy/gunicorn.conf.py", "--check-config",
         "labplan.wsgi"],
        cwd=ROOT, env={**os.environ, "LABPLAN_WEB_WORKERS": "none"}, capture_output=True,
        text=True, check=False, timeout=START_LIMIT_S,
    )  # fmt: skip
    assert ended.returncode != 0
    assert "LABPLAN_WEB_WORKERS='none': give a whole number, 1 to 64." in ended.stderr
