"""Hash every stored document again and say which is not what it was."""

from typing import Any

from django.core.management.base import CommandError

from labplan.base.commands import LabCommand
from labplan.procedures.services import verify_documents


class Command(LabCommand):
    help = "Hash every stored document again and compare it with what was stored beside it."

    def handle(self, *args: Any, **options: Any) -> None:
        report = verify_documents()
        for fault in report.faults:
            self.stderr.write(f"{fault.procedure}, {fault.where}: {fault.detail}")
        if report.faults:
            raise CommandError(f"{report.documents} documents: {len(report.faults)} fault(s).")
        self.stdout.write(f"{report.documents} documents: every hash matches.")
