"""Let a person in no more."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.people import retire_person


class Command(LabCommand):
    help = "Let a person in no more: every token of theirs ends at once; records stay."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("code", help="the person's code")

    def handle(self, *args: Any, **options: Any) -> None:
        try:
            ended = retire_person(person_code=options["code"])
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"{options['code']} is let in no more; {ended} token(s) ended.")
