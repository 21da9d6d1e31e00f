"""Move a laptop's SQLite database to a group's PostgreSQL."""

from typing import Any

from django.core.management.base import CommandParser
from rich.console import Console
from rich.progress import Progress

from labplan.base.commands import LabCommand
from labplan.operations.commands import refusals_told
from labplan.operations.moving import Moved, move_up


class Command(LabCommand):
    help = (
        "Copy this SQLite database to an empty PostgreSQL database, check that both hold the same, "
        "and pause the outbox here. Stop labplan here first."
    )

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("target", metavar="postgresql://...")

    def handle(self, *args: Any, **options: Any) -> None:
        console = Console(stderr=True)
        with (
            refusals_told(),
            Progress(console=console, transient=True, disable=not console.is_terminal) as bar,
        ):
            task = bar.add_task("Moving", total=None)
            moved = move_up(
                options["target"],
                progress=lambda name, done, total: bar.update(
                    task, description=name, completed=done, total=total
                ),
            )
        self._tell(moved)

    def _tell(self, moved: Moved) -> None:
        width = max(len(table.name) for table in moved.tables)
        for table in moved.tables:
            self.stdout.write(f"{table.name:<{width}} {table.rows:>9}  {table.digest[:16]}")
        self.stdout.write(f"{moved.counts}: on both sides every book adds up, every hash matches.")
        self.stdout.write(
            f"Everything is in {moved.address} now. Set DATABASE_URL to the address you gave, on "
            "every machine that serves it. The outbox of this SQLite database is paused: keep the "
            "file, do not use it."
        )
        if moved.is_paused:
            self.stdout.write(
                "It was paused before, so the outbox of the target is paused too: 'manage.py "
                "outbox resume' there."
            )
