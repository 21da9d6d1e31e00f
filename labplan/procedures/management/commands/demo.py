"""Show the whole house at work on an invented scenario."""

from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management import call_command
from django.core.management.base import BaseCommand, CommandError
from django.db import connection
from rich.console import Console

from labplan.base import clock
from labplan.base.tokens import create_token
from labplan.procedures.demo import scenario as demo_scenario
from labplan.procedures.demo.live import ApiClient, running_relay, running_server
from labplan.procedures.demo.printing import print_procedure


class Command(BaseCommand):
    help = "Load an invented stock, ask for one glycoside over HTTP and print the answer."
    requires_migrations_checks = False

    def handle(self, *args: Any, **options: Any) -> None:
        if not getattr(settings, "IS_DEMO", False):
            raise CommandError("The demo runs on a database of its own: use `make demo`.")
        console = Console(highlight=False)
        scenario = demo_scenario.read_scenario()
        with clock.replaced_by(clock.running_from(demo_scenario.starting_instant(scenario))):
            _empty_database(console)
            _load(console, scenario)
            procedure, shelf, sheet = _ask(console, scenario)
        print_procedure(console, procedure, shelf)
        path = settings.OUT_DIR / "sheet.html"
        path.write_text(sheet)
        console.print(f"\nThe sheet for the hood: [bold]{path.relative_to(settings.BASE_DIR)}[/]")
        if procedure["state"] != "planned":
            raise CommandError(f"The demo procedure ended {procedure['state']}.")


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
    console.print(
        f"{scenario['group']} (invented): {result.bottles} bottles in {result.places} places, "
        f"as of {clock.today()}."
    )


def _ask(
    console: Console, scenario: dict[str, Any]
) -> tuple[dict[str, Any], list[dict[str, Any]], str]:
    """Request, relay, poll; return the procedure, the bottles it uses and the sheet."""
    wanted = dict(scenario["request"])
    token = create_token(person_code=wanted.pop("person"), name="demo")
    with running_server() as address, running_relay():
        client = ApiClient(address, token)
        console.print(f"POST {address}/api/v1/procedures/")
        accepted = client.post("/api/v1/procedures/", wanted)
        procedure = client.wait_until_settled(accepted["links"]["self"])
        codes = _bottles_used(procedure)
        shelf = [client.get(f"/api/v1/bottles/{code}/") for code in codes]
        sheet = client.get_text(procedure["links"]["sheet_html"])
    return procedure, shelf, sheet


def _bottles_used(procedure: dict[str, Any]) -> list[str]:
    route = procedure["document"]["route"]
    stages = route["stages"] if route else []
    return [
        charge["bottle"]
        for stage in stages
        for charge in stage["charges"]
        if charge["group"] == "reaction" and charge["bottle"]
    ]
