"""The processes around the waiting service: the service itself, web services, a broker."""

import asyncio
import http.client
import json
import os
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

from labplan.operations.waiting.server import Options, Service
from tests.db.bench import database_address

ROOT = Path(__file__).resolve().parents[2]
CEILING_S = 30.0  # nothing here takes so long; only a hang does


def until(is_so: Callable[[], Any], *, seconds: float = CEILING_S) -> Any:
    """Look until it is so; TimeoutError when it never is."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if found := is_so():
            return found
        time.sleep(0.01)
    raise TimeoutError("it never came to be so")


# ---- a client that shows everything ----


@dataclass(frozen=True)
class Answer:
    status: int
    headers: list[tuple[str, str]]
    body: bytes

    def __getitem__(self, name: str) -> str | None:
        found = [value for key, value in self.headers if key.lower() == name.lower()]
        return ", ".join(found) if found else None

    def json(self) -> Any:
        return json.loads(self.body)


class Client:
    """Plain HTTP with a token over TCP or a Unix socket, one connection a request."""

    def __init__(self, address: str, token: str = "") -> None:
        self.address = address
        self.token = token

    def ask(
        self, method: str, path: str, body: Any = None, headers: dict[str, str] | None = None
    ) -> Answer:
        connection = self.connect()
        try:
            sent = {"Authorization": f"Bearer {self.token}"} if self.token else {}
            # A server that refuses a body unread hangs up; what it said is there nevertheless.
            with suppress(BrokenPipeError, ConnectionResetError):
                connection.request(method, path, body=body, headers={**sent, **(headers or {})})
            response = connection.getresponse()
            return Answer(response.status, response.getheaders(), response.read())
        finally:
            connection.close()

    def get(self, path: str, **headers: str) -> Answer:
        return self.ask("GET", path, headers={k.replace("_", "-"): v for k, v in headers.items()})

    def connect(self) -> http.client.HTTPConnection:
        if self.address.startswith("unix:"):
            connection = http.client.HTTPConnection("127.0.0.1", timeout=CEILING_S)
            connection.sock = socket.socket(socket.AF_UNIX)
            connection.sock.settimeout(CEILING_S)
            connection.sock.connect(self.address.removeprefix("unix:"))
            return connection
        return http.client.HTTPConnection(urlsplit(self.address).netloc, timeout=CEILING_S)


@dataclass
class Later:
    """A request under way in a thread."""

    _thread: threading.Thread
    _found: list[Any]

    def answer(self) -> Answer:
        self._thread.join(CEILING_S)
        assert self._found, "no answer came"
        found: Answer = self._found[0]
        if isinstance(found, BaseException):
            raise found
        return found

    @property
    def is_waiting(self) -> bool:
        return self._thread.is_alive()


def later(call: Callable[[], Any]) -> Later:
    found: list[Any] = []

    def run() -> None:
        try:
            found.append(call())
        except Exception as error:
            found.append(error)

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    return Later(thread, found)


# ---- the service ----


@dataclass
class Running:
    """The service in a thread of this process, where a test can look into it."""

    address: str
    service: Service

    @property
    def waiting(self) -> int:
        return self.service.door.waiting

    def client(self, token: str = "") -> Client:
        return Client(self.address, token)


@contextmanager
def running_service(web: str, broker: str = "", *, most_waiting: int = 200) -> Iterator[Running]:
    loop = asyncio.new_event_loop()
    thread = threading.Thread(target=loop.run_forever, daemon=True)
    thread.start()

    async def begin() -> Running:
        service = Service(Options("127.0.0.1:0", web, broker, most_waiting))
        return Running(await service.start(), service)

    running = asyncio.run_coroutine_threadsafe(begin(), loop).result(CEILING_S)
    try:
        yield running
    finally:
        asyncio.run_coroutine_threadsafe(running.service.end(), loop).result(CEILING_S)
        until(lambda: not asyncio.all_tasks(loop))  # nothing is left behind
        loop.call_soon_threadsafe(loop.stop)
        thread.join(CEILING_S)
        loop.close()


@contextmanager
def service_process(*arguments: str) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """The service as it is run: the process, and the address it says it listens on."""
    with ended(
        subprocess.Popen(
            [sys.executable, "-m", "labplan.operations.waiting", *arguments],
            cwd=ROOT, stderr=subprocess.PIPE, text=True, env=_bare_environment(),
        )
    ) as process:  # fmt: skip
        assert process.stderr is not None
        line = process.stderr.readline()
        assert "listening on" in line, line + process.stderr.read()
        yield process, line.split("listening on ")[1].strip()


def _bare_environment() -> dict[str, str]:
    """Without anything that tells of settings, a database or a broker."""
    told = ("DJANGO", "LABPLAN", "DATABASE", "REDIS")
    return {name: value for name, value in os.environ.items() if not name.startswith(told)}


@contextmanager
def ended(process: subprocess.Popen[Any]) -> Iterator[subprocess.Popen[Any]]:
    try:
        yield process
    finally:
        process.kill()
        process.wait(CEILING_S)
        if process.stderr is not None:
            process.stderr.close()


# ---- web services ----


@contextmanager
def gunicorn(folder: Path, *options: str, broker: str = "") -> Iterator[str]:
    """The real web service with one worker on a Unix socket; it reads the tests' database."""
    address = f"unix:{folder / 'web.sock'}"
    environment = {
        **os.environ, "DATABASE_URL": database_address(), "REDIS_URL": broker,
        "DJANGO_SETTINGS_MODULE": "labplan.settings.test",
    }  # fmt: skip
    command = [
        sys.executable, "-m", "gunicorn", "tests.operations.wsgi", "--workers", "1",
        "--bind", address, "--log-level", "warning", *options,
    ]  # fmt: skip
    with ended(subprocess.Popen(command, cwd=ROOT, env=environment)) as process:
        try:
            until(lambda: _answers(address))
            yield address
        finally:
            process.terminate()
            process.wait(CEILING_S)


def _answers(address: str) -> bool:
    try:
        return Client(address).get("/").status > 0
    except OSError:
        return False


Reply = Callable[[bytes, socket.socket], None]


@contextmanager
def scripted_web(folder: Path, reply: Reply, *, name: str = "web.sock") -> Iterator[str]:
    """A web service that does with each connection what the test says.

    `reply` gets the head of the request and the connection, which is closed after it.
    """
    path = folder / name
    with socket.socket(socket.AF_UNIX) as listener:
        listener.bind(str(path))
        listener.listen(300)
        threading.Thread(target=_serve_script, args=(listener, reply), daemon=True).start()
        try:
            yield f"unix:{path}"
        finally:
            listener.shutdown(socket.SHUT_RDWR)
            path.unlink()


def _serve_script(listener: socket.socket, reply: Reply) -> None:
    while True:
        try:
            connection, _ = listener.accept()
        except OSError:
            return
        threading.Thread(target=_serve_one, args=(connection, reply), daemon=True).start()


def _serve_one(connection: socket.socket, reply: Reply) -> None:
    with connection:
        connection.settimeout(CEILING_S)
        head = b""
        while not head.endswith(b"\r\n\r\n") and (sign := connection.recv(1)):
            head += sign
        if head:
            with suppress(OSError):  # the other side may have hung up, as some tests want
                reply(head, connection)
