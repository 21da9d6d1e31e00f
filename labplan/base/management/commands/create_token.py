"""Make a token for a person and print it once."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.models import ApiToken
from labplan.base.tokens import DEFAULT_DAYS, create_token

MOST_DAYS = 3650


class Command(LabCommand):
    help = "Make a token for a person; it is printed once and cannot be read again."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("person", help="the person's code")
        parser.add_argument("--name", required=True, help="what the token is for")
        parser.add_argument("--scope", choices=ApiToken.Scope.values, default="write")
        parser.add_argument("--days", type=int, default=DEFAULT_DAYS)

    def handle(self, *args: Any, **options: Any) -> None:
        if not 1 <= options["days"] <= MOST_DAYS:
            raise CommandError(f"A token lives 1 to {MOST_DAYS} days.")
        try:
            text = create_token(
                person_code=options["person"],
                name=options["name"],
                scope=options["scope"],
                days=options["days"],
            )
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(text)
