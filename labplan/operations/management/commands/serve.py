"""Serve labplan on this machine: web, waiting, relay, worker, scheduler and a broker."""

import contextlib
import os
import socket
import tempfile
import time
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import redis
from django.conf import settings
from django.core.management import call_command
from django.core.management.base import CommandError, CommandParser
from django.db import connection
from django.db.migrations.executor import MigrationExecutor

from labplan.base import broker
from labplan.base.commands import LabCommand
from labplan.base.endings import asked_to_stop_by_signals
from labplan.base.models import Person
from labplan.operations import programs
from labplan.operations.broker_server import BrokerServer, BrokerUnavailableError
from labplan.operations.supervisor import Program, ProgramFailsError, Supervisor

READY_LIMIT_S = 60


class Command(LabCommand):
    help = "Serve labplan on this machine until Ctrl-C, with everything that belongs to it."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--host", default="127.0.0.1", help="address to listen on")
        parser.add_argument("--port", type=int, default=8000)
        parser.add_argument("--web", type=int, default=2, help="web processes")
        parser.add_argument(
            "--workers", type=int, default=programs.default_processes(), help="planning processes"
        )

    def handle(self, *args: Any, **options: Any) -> None:
        _check_numbers(options)
        _check_port(options["host"], options["port"])
        if settings.BROKER_URL:
            _require_broker()
        self._prepare_database()
        with tempfile.TemporaryDirectory(prefix="labplan-") as name:
            try:
                self._serve(Path(name), options)
            except (BrokerUnavailableError, ProgramFailsError) as error:
                raise CommandError(str(error)) from error
        self.stdout.write("Stopped.")

    def _serve(self, folder: Path, options: dict[str, Any]) -> None:
        listen = f"{options['host']}:{options['port']}"
        web_socket = folder / "web.sock"
        address, own_broker = _broker(folder)
        with _environment(folder, address):
            supervisor = Supervisor(
                [
                    *own_broker,
                    programs.worker(processes=options["workers"]),
                    programs.scheduler(folder),
                    programs.relay(),
                    programs.web(web_socket, processes=options["web"]),
                    programs.waiting(listen, web_socket, address),
                ]
            )
            with asked_to_stop_by_signals(supervisor.stop_asked), supervisor.running():
                if self._wait_until_ready(supervisor, listen, web_socket):
                    self._say_where(listen, options)
                    supervisor.watch()
                self.stdout.write("Stopping ...")

    def _wait_until_ready(self, supervisor: Supervisor, listen: str, web_socket: Path) -> bool:
        """False when it was stopped before; CommandError when it never gets ready."""
        give_up = time.monotonic() + READY_LIMIT_S
        while not supervisor.stop_asked.wait(0.1):
            if web_socket.exists() and _is_ready(listen):
                return True
            supervisor.look()
            if time.monotonic() > give_up:
                raise CommandError(
                    f"Not ready after {READY_LIMIT_S} s; http://{listen}/health/ready/ says why."
                )
        return False

    def _prepare_database(self) -> None:
        """Make or update the tables of a laptop's own file; a server's are for its operator."""
        executor = MigrationExecutor(connection)
        if not executor.migration_plan(executor.loader.graph.leaf_nodes()):
            return
        if connection.vendor != "sqlite" or os.environ.get("DATABASE_URL"):
            raise CommandError(
                "The database is not up to date: run 'manage.py migrate' (after a backup) first."
            )
        self.stdout.write(f"Making the tables in {_shown(settings.DATABASES['default']['NAME'])}")
        Path(connection.settings_dict["NAME"]).parent.mkdir(parents=True, exist_ok=True)
        call_command("migrate", verbosity=0)

    def _say_where(self, listen: str, options: dict[str, Any]) -> None:
        whose = "the broker of REDIS_URL" if settings.BROKER_URL else "a broker of its own"
        self.stdout.write(
            f"\nlabplan serves until Ctrl-C ({options['workers']} planning processes, {whose}):\n"
            f"  ADDRESS=http://{listen}\n"
            f"What it answers is described at /api/v1/docs/ there.\n"
        )
        python = _shown(os.environ.get("VIRTUAL_ENV", ".venv")) + "/bin/python"
        person = Person.objects.filter(is_active=True).order_by("pk").first()
        if person is None:
            self.stdout.write(
                "Nobody is known yet. In another terminal:\n"
                f'  {python} manage.py create_person KIM --name "Kim Doe" --administrator\n'
                f'  {python} manage.py create_project PROBES-1 --title "Probes" --member KIM:lead'
            )
        else:
            self.stdout.write("For a token, in another terminal:")
        code = person.code if person else "KIM"
        self.stdout.write(f"  {python} manage.py create_token {code} --name laptop\n")


def _broker(folder: Path) -> tuple[str, list[Program]]:
    """The address of the broker that REDIS_URL names, else of one that is started with the rest."""
    if settings.BROKER_URL:
        return settings.BROKER_URL, []
    server = BrokerServer(folder)
    return server.address, [Program("broker", server.arguments)]


def _require_broker() -> None:
    try:
        broker.client().ping()
    except redis.RedisError as error:
        raise CommandError(
            f"The broker that REDIS_URL names does not answer ({error}): start it, or unset "
            "REDIS_URL and labplan starts one."
        ) from error


@contextlib.contextmanager
def _environment(folder: Path, broker: str) -> Iterator[None]:
    """What all programs are told: where the broker is, and where to count."""
    counters = folder / "counters"
    counters.mkdir()
    told = {"REDIS_URL": broker, "PROMETHEUS_MULTIPROC_DIR": str(counters)}
    before = {name: os.environ.get(name) for name in told}
    os.environ.update(told)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _check_numbers(options: dict[str, Any]) -> None:
    for name in ("web", "workers"):
        if not 1 <= options[name] <= 64:
            raise CommandError(f"--{name} takes 1 to 64.")


def _check_port(host: str, port: int) -> None:
    try:
        with socket.create_server((host, port)):
            return
    except (OSError, OverflowError) as error:
        why = error.strerror if isinstance(error, OSError) else str(error).rstrip(".")
        raise CommandError(
            f"{host}:{port} cannot be served on: {why}. Take another port: "
            'make serve ARGS="--port 8001".'
        ) from error


def _is_ready(listen: str) -> bool:
    try:
        with urllib.request.urlopen(f"http://{listen}/health/ready/", timeout=5) as answer:
            return bool(answer.status == 200)
    except OSError:
        return False


def _shown(path: object) -> str:
    """A path as a person would type it here."""
    whole = Path(str(path))
    return str(whole.relative_to(Path.cwd())) if whole.is_relative_to(Path.cwd()) else str(whole)
