"""A live server and a relay, each in a thread with its own database connection."""

import json
import threading
import time
import urllib.request
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any
from wsgiref.simple_server import WSGIRequestHandler

from django.core.management.base import CommandError
from django.core.servers.basehttp import ThreadedWSGIServer
from django.core.wsgi import get_wsgi_application
from django.db import connection

from labplan.base import outbox


class _QuietHandler(WSGIRequestHandler):
    def log_message(self, format: str, *args: Any) -> None:  # noqa: A002 - the base class's name
        return None


@contextmanager
def running_server(port: int = 0) -> Iterator[str]:
    """Serve on a port of this machine (0: any free one); yield the address."""
    try:
        server = ThreadedWSGIServer(("127.0.0.1", port), _QuietHandler)
    except (OSError, OverflowError) as error:
        raise CommandError(f"Port {port} cannot be served on: {error}.") from error
    server.set_app(get_wsgi_application())
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.05})
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_port}"
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


@contextmanager
def running_relay() -> Iterator[None]:
    """Run the outbox's work after commit, on this thread's own connection."""
    stop = threading.Event()
    thread = threading.Thread(target=_relay, args=(stop,))
    thread.start()
    try:
        yield
    finally:
        stop.set()
        thread.join()


def _relay(stop: threading.Event) -> None:
    try:
        while not stop.wait(0.05):
            outbox.deliver_waiting()
    finally:
        connection.close()


class ApiClient:
    """A few lines of HTTP with a token."""

    def __init__(self, address: str, token: str) -> None:
        self.address = address
        self._token = token

    def get(self, path: str) -> Any:
        return json.loads(self.get_text(path))

    def get_text(self, path: str) -> str:
        return self.get_bytes(path).decode()

    def get_bytes(self, path: str) -> bytes:
        return self._send(urllib.request.Request(self.address + path))

    def post(self, path: str, body: dict[str, Any]) -> Any:
        request = urllib.request.Request(
            self.address + path,
            data=json.dumps(body).encode(),
            headers={
                "Content-Type": "application/json",
                "Idempotency-Key": str(uuid.uuid4()),
            },
        )
        return json.loads(self._send(request))

    def wait_until_settled(self, path: str, *, seconds: float = 20.0) -> Any:
        """Poll a procedure until it is not queued any more; TimeoutError after `seconds`."""
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            procedure = self.get(path)
            if procedure["state"] != "queued":
                return procedure
            time.sleep(0.05)
        raise TimeoutError(f"{path} is still queued after {seconds:g} s")

    def _send(self, request: urllib.request.Request) -> bytes:
        request.add_header("Authorization", f"Bearer {self._token}")
        with urllib.request.urlopen(request, timeout=20) as response:
            body: bytes = response.read()
            return body
