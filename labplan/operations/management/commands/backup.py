"""Keep a copy of the database in one file, while labplan works on."""

from pathlib import Path
from typing import Any

from django.core.management.base import CommandParser

from labplan.base.commands import LabCommand
from labplan.operations.backup import make_backup
from labplan.operations.commands import refusals_told, shown_progress


class Command(LabCommand):
    help = "Copy the database into FILE: one consistent state, checked; labplan may go on working."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("file", type=Path, metavar="FILE")
        parser.add_argument("--force", action="store_true", help="overwrite FILE")

    def handle(self, *args: Any, **options: Any) -> None:
        with refusals_told(), shown_progress("Copying") as progress:
            made = make_backup(options["file"], force=options["force"], progress=progress)
        self.stdout.write(f"{made.path}: {made.size_bytes:,} bytes, {made.counts}.")
        self.stdout.write(f"SHA-256 {made.sha256}")
