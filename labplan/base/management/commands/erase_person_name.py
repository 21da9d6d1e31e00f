"""Erase the name behind a code."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.people import erase_person_name


class Command(LabCommand):
    help = "Erase a person's name and mail address; the code and every record stay."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("code", help="the person's code")

    def handle(self, *args: Any, **options: Any) -> None:
        code = options["code"]
        try:
            erased = erase_person_name(person_code=code)
        except DomainError as error:
            raise CommandError(error.detail) from error
        said = "is erased here; backups keep it until they are gone" if erased else "was not kept"
        self.stdout.write(f"The name of {code} {said}. Records keep the code.")
