"""Re-add every book of the stock and say what does not add up."""

from typing import Any

from django.core.management.base import CommandError

from inventory.services.verify import verify_ledger
from labplan.base.commands import LabCommand


class Command(LabCommand):
    help = "Re-add every book, look for gaps, compare with balances and open holds."

    def handle(self, *args: Any, **options: Any) -> None:
        report = verify_ledger()
        for fault in report.faults:
            self.stderr.write(f"{fault.bottle}, {fault.where}: {fault.detail}")
        text = f"{report.bottles} bottles, {report.movements} movements"
        if report.faults:
            raise CommandError(f"{text}: {len(report.faults)} fault(s).")
        self.stdout.write(f"{text}: every book adds up.")
