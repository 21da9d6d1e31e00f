"""Put a backup in the place of the database; its outbox is paused."""

from pathlib import Path
from typing import Any

from django.core.management.base import CommandParser

from labplan.base.commands import LabCommand
from labplan.operations.commands import refusals_told, shown_progress
from labplan.operations.restore import Restored, restore_backup

NEXT = (
    "The outbox is PAUSED. Look at the stock, tell people what is lost since the backup, then:\n"
    "  manage.py outbox status\n"
    "  manage.py outbox resume\n"
    "and start labplan again (in either order)."
)


class Command(LabCommand):
    help = (
        "Restore FILE, made by the command backup. Stop labplan first: web, workers and relay. "
        "Afterwards the outbox is paused until 'manage.py outbox resume'."
    )

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("file", type=Path, metavar="FILE")
        parser.add_argument(
            "--replace", action="store_true",
            help="SQLite: the present database holds data; keep it under a dated name",
        )  # fmt: skip
        parser.add_argument(
            "--with-faults", action="store_true",
            help="use the backup although a book or a document in it is wrong",
        )  # fmt: skip

    def handle(self, *args: Any, **options: Any) -> None:
        with refusals_told(), shown_progress("Copying") as progress:
            restored = restore_backup(
                options["file"], replace=options["replace"],
                with_faults=options["with_faults"], progress=progress,
            )  # fmt: skip
        self._tell(options["file"], restored)

    def _tell(self, path: Path, restored: Restored) -> None:
        if restored.kept_as is not None:
            self.stdout.write(f"The database before is kept as {restored.kept_as}")
        self.stdout.write(f"Restored {path}: {restored.health.counts}.")
        for fault in restored.health.faults:
            self.stderr.write(fault)
        if not restored.health.faults:
            self.stdout.write("Every book adds up, every document's hash matches.")
        self.stdout.write(f"{restored.recalled} message(s) were on their way; they wait again.")
        self.stdout.write(NEXT)
