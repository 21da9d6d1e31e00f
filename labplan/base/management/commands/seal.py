"""Seal what was written since the newest seal."""

from typing import Any

from django.core.management.base import CommandError

from labplan.base.commands import LabCommand
from labplan.base.errors import DomainError
from labplan.base.seal import newest_printed, seal_new


class Command(LabCommand):
    help = "Seal the books, the event log and the documents; print the newest seal."

    def handle(self, *args: Any, **options: Any) -> None:
        try:
            rows = seal_new()
        except DomainError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"{rows} rows sealed; the newest seal is {newest_printed() or 'none'}.")
