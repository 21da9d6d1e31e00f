"""Show the whole house at work on an invented scenario."""

import json
import threading
from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management import call_command
from django.core.management.base import BaseCommand, CommandError, CommandParser
from django.db import connection
from rich.console import Console

from labplan.base import clock
from labplan.base.endings import asked_to_stop_by_signals
from labplan.base.seal import seal_new
from labplan.base.tokens import create_token
from labplan.procedures.demo import scenario as demo_scenario
from labplan.procedures.demo.live import ApiClient, running_relay, running_server
from labplan.procedures.printing import print_procedure


class Command(BaseCommand):
    help = "Load an invented stock, ask for one glycoside over HTTP and print the answer."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument(
            "--stay", action="store_true", help="keep the server running until Ctrl-C"
        )
        parser.add_argument("--port", type=int, default=0, help="port to serve on (default: any)")

    def handle(self, *args: Any, **options: Any) -> None:
        if not getattr(settings, "IS_DEMO", False):
            raise CommandError("The demo runs on a database of its own: use `make demo`.")
        console = Console(highlight=False)
        scenario = demo_scenario.read_scenario()
        with clock.replaced_by(clock.running_from(demo_scenario.starting_instant(scenario))):
            _empty_database(console)
            _load(console, scenario)
            state = _run(console, scenario, port=options["port"], stay=options["stay"])
        if state != "planned":
            raise CommandError(f"The demo procedure ended {state}.")


def _empty_database(console: Console) -> None:
    connection.close()
    database = Path(settings.DEMO_DATABASE)
    database.parent.mkdir(parents=True, exist_ok=True)
    for suffix in ("", "-wal", "-shm"):
        database.with_name(database.name + suffix).unlink(missing_ok=True)
    with console.status("Making an empty database"):
        call_command("migrate", verbosity=0)


def _load(console: Console, scenario: dict[str, Any]) -> None:
    with console.status("Loading the stock"):
        demo_scenario.load_people(scenario)
        result = demo_scenario.load_stock(scenario)
        seal_new()
    console.print(
        f"{scenario['group']} (invented): {result.bottles} bottles in {result.places} places, "
        f"as of {clock.today()}."
    )


def _run(console: Console, scenario: dict[str, Any], *, port: int, stay: bool) -> str:
    """Serve, ask, print, leave the files; return the state the procedure ended in."""
    wanted = dict(scenario["request"])
    token = create_token(person_code=wanted.pop("person"), name="demo")
    with running_server(port) as address, running_relay():
        client = ApiClient(address, token)
        procedure = _ask(console, client, wanted)
        shelf = [client.get(f"/api/v1/bottles/{code}/") for code in _bottles_used(procedure)]
        print_procedure(console, procedure, shelf)
        _leave_files(console, client, procedure)
        if stay:
            _stay(console, address, token)
    return str(procedure["state"])


def _ask(console: Console, client: ApiClient, wanted: dict[str, Any]) -> dict[str, Any]:
    console.print(f"POST {client.address}/api/v1/procedures/")
    with console.status("Planning"):
        accepted = client.post("/api/v1/procedures/", wanted)
        procedure: dict[str, Any] = client.wait_until_settled(accepted["links"]["self"])
    return procedure


def _bottles_used(procedure: dict[str, Any]) -> list[str]:
    route = procedure["document"]["route"]
    stages = route["stages"] if route else []
    used = [
        charge["bottle"]
        for stage in stages
        for charge in stage["charges"]
        if charge["group"] == "reaction" and charge["bottle"]
    ]
    return list(dict.fromkeys(used))


def _leave_files(console: Console, client: ApiClient, procedure: dict[str, Any]) -> None:
    sheet, answer = settings.OUT_DIR / "sheet.html", settings.OUT_DIR / "procedure.json"
    sheet.write_text(client.get_text(procedure["links"]["sheet_html"]), encoding="utf-8")
    pdf = client.get_bytes(procedure["links"]["sheet_pdf"])
    (settings.OUT_DIR / "sheet.pdf").write_bytes(pdf)
    answer.write_text(json.dumps(procedure, indent=1, ensure_ascii=False), encoding="utf-8")
    console.print(
        "\nThe sheet for the hood: [bold]out/sheet.pdf[/] and out/sheet.html; all of it: "
        "out/procedure.json"
    )


def _stay(console: Console, address: str, token: str) -> None:
    stop = threading.Event()
    with asked_to_stop_by_signals(stop):
        console.print(f"\nServing until Ctrl-C. For another terminal:\n  ADDRESS={address}")
        console.print(f"  TOKEN={token}", soft_wrap=True)
        while not stop.wait(0.2):
            pass
    console.print("Stopped.")
