"""End tokens at once."""

from typing import Any

from django.core.management.base import CommandError, CommandParser
from django.db import transaction

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.models import ApiToken, Person
from labplan.base.tokens import revoke_all_tokens, revoke_token


class Command(LabCommand):
    help = "Revoke one token or all of a person's; without --id or --all, list them."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("person", help="the person's code")
        which = parser.add_mutually_exclusive_group()
        which.add_argument("--id", type=int, help="number of the token, from the list")
        which.add_argument("--all", action="store_true", help="every token of the person")

    def handle(self, *args: Any, **options: Any) -> None:
        person = Person.objects.filter(code=options["person"]).first()
        if person is None:
            raise CommandError(f"There is no person {options['person']!r}.")
        if options["all"]:
            with transaction.atomic(durable=True):
                ended = revoke_all_tokens(person_id=person.pk, code=person.code, by="OPERATOR")
            self.stdout.write(f"{ended} token(s) of {person.code} revoked.")
        elif options["id"] is not None:
            self._revoke_one(person, options["id"])
        else:
            self._list(person)

    def _revoke_one(self, person: Person, token_id: int) -> None:
        if not person.tokens.filter(pk=token_id).exists():
            raise CommandError(f"{person.code} has no token {token_id}.")
        try:
            token = revoke_token(token_id=token_id)
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"Token {token.pk} ({token.name}) of {person.code} is revoked.")

    def _list(self, person: Person) -> None:
        for token in ApiToken.objects.filter(person=person).order_by("pk"):
            state = "revoked" if token.revoked_at else f"until {token.expires_at:%Y-%m-%d}"
            used = f"{token.last_used_at:%Y-%m-%d}" if token.last_used_at else "never"
            self.stdout.write(f"{token.pk}  {token.name}  {token.scope}  {state}  used: {used}")
