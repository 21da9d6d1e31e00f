"""Set the password of a person."""

import getpass
import sys
from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.login import set_password


class Command(LabCommand):
    help = "Set a person's password; tokens that were given for the old one end."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("code", help="the person's code")
        parser.add_argument(
            "--stdin", action="store_true", help="read the password from the first line of stdin"
        )

    def handle(self, *args: Any, **options: Any) -> None:
        password = sys.stdin.readline().rstrip("\r\n") if options["stdin"] else _ask_twice()
        try:
            ended = set_password(person_code=options["code"], password=password)
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"The password of {options['code']} is set; {ended} token(s) ended.")


def _ask_twice() -> str:
    password = getpass.getpass("New password: ")
    if password != getpass.getpass("Again: "):
        raise CommandError("The two do not agree.")
    return password
