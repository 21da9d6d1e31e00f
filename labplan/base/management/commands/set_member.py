"""Say what a person may do in a project that is there already."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.models import Membership
from labplan.base.people import set_member

NOBODY = "none"


class Command(LabCommand):
    help = "Give a person a role in a project, or take it away."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("project", help="the project's code")
        parser.add_argument("person", help="the person's code")
        parser.add_argument("role", choices=[*Membership.Role.values, NOBODY])

    def handle(self, *args: Any, **options: Any) -> None:
        role = None if options["role"] == NOBODY else options["role"]
        project, person = options["project"], options["person"]
        try:
            before = set_member(project_code=project, person_code=person, role=role)
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"{person} in {project}: {role or NOBODY} (was {before or NOBODY}).")
