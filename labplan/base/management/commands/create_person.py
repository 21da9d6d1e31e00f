"""Make a person who may ask for things."""

from typing import Any

from django.core.management.base import CommandError, CommandParser
from django.db import transaction

from labplan.base.commands import LabCommand, checked_code, checked_text
from labplan.base.events import record_event
from labplan.base.models import Person, PersonName


class Command(LabCommand):
    help = "Make a person: a code for ledger and records, and a name that can be erased."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("code", help="short code, as it stands in every record")
        parser.add_argument("--name", required=True, help="full name")
        kind = parser.add_mutually_exclusive_group()
        kind.add_argument("--administrator", action="store_true", help="may receive stock")
        kind.add_argument("--auditor", action="store_true", help="sees everything, changes nothing")

    def handle(self, *args: Any, **options: Any) -> None:
        role = Person.SiteRole.NONE
        if options["administrator"]:
            role = Person.SiteRole.ADMINISTRATOR
        if options["auditor"]:
            role = Person.SiteRole.AUDITOR
        code = checked_code(options["code"])
        with transaction.atomic(durable=True):
            if Person.objects.filter(code=code).exists():
                raise CommandError(f"There is a person {code} already.")
            person = Person.objects.create_user(code, site_role=role)
            PersonName.objects.create(person=person, full_name=checked_text(options["name"], 120))
            record_event(
                actor_code="OPERATOR",
                kind="person.created",
                subject=f"person {code}",
                after={"site_role": role},
            )
        self.stdout.write(f"{code} is there; make a token with 'manage.py create_token {code}'.")
