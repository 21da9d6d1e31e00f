"""Re-add every book of the stock, walk the seals, and say what is not as it should be."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from inventory.services.verify import LedgerReport, verify_ledger
from labplan.base.commands import LabCommand


class Command(LabCommand):
    help = "Re-add every book, compare with balances and open holds, and walk every seal."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument(
            "--newest", default="", metavar="SEAL",
            help="the newest seal printed on a sheet: finds seals cut off at the end",
        )  # fmt: skip

    def handle(self, *args: Any, **options: Any) -> None:
        report = verify_ledger(newest=options["newest"])
        for fault in report.faults:
            self.stderr.write(f"{fault.bottle}, {fault.where}: {fault.detail}")
        if report.found > len(report.faults):
            self.stderr.write(f"... and {report.found - len(report.faults)} more")
        text = f"{report.bottles} bottles, {report.movements} movements"
        if report.found:
            raise CommandError(f"{text}: {report.found} fault(s).")
        self.stdout.write(f"{text}: every book adds up.")
        self.stdout.write(_seals_text(report))


def _seals_text(report: LedgerReport) -> str:
    if not report.seals:
        return f"No seals yet: {report.unsealed_rows} rows wait for 'manage.py seal'."
    return (
        f"{report.seals} seals, the newest {report.newest}, over {report.sealed_rows} rows; "
        f"{report.unsealed_rows} rows are not sealed yet."
    )
