"""Read places and bottles from CSV into the stock."""

from pathlib import Path
from typing import Any

from django.core.management.base import CommandError, CommandParser
from rich.progress import Progress

from inventory.services import import_stock
from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.models import Person
from labplan.base.rights import actor_for


class Command(LabCommand):
    help = "Import bottles (and places) from CSV: everything or nothing."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("bottles", type=Path, help="CSV with one bottle a line")
        parser.add_argument("--places", type=Path, help="CSV with the places the bottles stand in")
        parser.add_argument("--person", required=True, help="code of the person who imports")

    def handle(self, *args: Any, **options: Any) -> None:
        person = Person.objects.filter(code=options["person"], is_active=True).first()
        if person is None:
            raise CommandError(f"There is no active person {options['person']!r}.")
        try:
            with Progress(transient=True, disable=not self.stdout.isatty()) as bar:
                task = bar.add_task("Reading bottles", total=None)
                result = import_stock(
                    actor=actor_for(person),
                    bottles_file=options["bottles"],
                    places_file=options["places"],
                    progress=lambda done, total: bar.update(task, completed=done, total=total),
                )
        except DomainError as error:
            lines = [f"  {e.field}: {e.detail} [{e.code}]" for e in error.errors]
            raise CommandError("\n".join([error.detail, *lines])) from error
        self.stdout.write(f"{result.bottles} bottles and {result.places} new places imported.")
