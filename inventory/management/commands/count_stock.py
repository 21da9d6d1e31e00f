"""Compare what stands on the shelf with the books, from a CSV of weights."""

from pathlib import Path
from typing import Any

from django.core.management.base import CommandError, CommandParser

from inventory.services import count_from_file
from inventory.services.counting import WORDS, count_in_words
from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.models import Person
from labplan.base.rights import actor_for


class Command(LabCommand):
    help = "Take stock from a CSV: bottle, and gross_g (tare_g) or mass_mg, volume_ml or pieces."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("file", type=Path, help="CSV with one bottle a line")
        parser.add_argument("--person", required=True, help="code of the person who counts")

    def handle(self, *args: Any, **options: Any) -> None:
        person = Person.objects.filter(code=options["person"], is_active=True).first()
        if person is None:
            raise CommandError(f"There is no active person {options['person']!r}.")
        try:
            taken = count_from_file(actor=actor_for(person), path=options["file"])
        except DomainError as error:
            lines = [f"  {e.field}: {e.detail} [{e.code}]" for e in error.errors]
            raise CommandError("\n".join([error.detail, *lines])) from error
        for counted in taken.counted:
            self.stdout.write(f"{counted.bottle.code}: {count_in_words(counted)}")
        corrected = sum(counted.verdict == "corrected" for counted in taken.counted)
        self.stdout.write(
            f"{len(taken.counted)} bottles counted, {corrected} {WORDS['corrected']}, "
            f"{taken.cancelled_holds} holds cancelled."
        )
