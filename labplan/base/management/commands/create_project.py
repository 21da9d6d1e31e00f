"""Make a project and say who belongs to it."""

from typing import Any

from django.core.management.base import CommandError, CommandParser
from django.db import transaction

from labplan.base import clock
from labplan.base.commands import LabCommand, checked_code, checked_text
from labplan.base.events import record_event
from labplan.base.models import Membership, Person, Project


class Command(LabCommand):
    help = "Make a project to charge work to, with its members."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("code")
        parser.add_argument("--title", required=True)
        parser.add_argument(
            "--member",
            action="append",
            default=[],
            metavar="PERSON:ROLE",
            help=f"repeat for each; roles: {', '.join(Membership.Role.values)}",
        )

    def handle(self, *args: Any, **options: Any) -> None:
        code = checked_code(options["code"])
        members = [_read_member(text) for text in options["member"]]
        with transaction.atomic(durable=True):
            if Project.objects.filter(code=code).exists():
                raise CommandError(
                    f"There is a project {code} already; manage.py set_member says who may do "
                    "what there."
                )
            project = Project.objects.create(
                code=code, title=checked_text(options["title"], 160), created_at=clock.now()
            )
            for person, role in members:
                Membership.objects.create(person=person, project=project, role=role)
            record_event(
                actor_code="OPERATOR",
                kind="project.created",
                subject=f"project {code}",
                after={"members": options["member"]},
            )
        self.stdout.write(f"{code} is there with {len(members)} member(s).")


def _read_member(text: str) -> tuple[Person, str]:
    code, _, role = text.partition(":")
    person = Person.objects.filter(code=code, is_active=True).first()
    if person is None:
        raise CommandError(f"There is no active person {code!r}.")
    if role not in Membership.Role.values:
        raise CommandError(
            f"{role!r} is no role; give PERSON:ROLE with one of "
            f"{', '.join(Membership.Role.values)}."
        )
    return person, role
