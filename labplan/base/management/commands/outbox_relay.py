"""Deliver what waits in the outbox, in this process."""

import threading
from typing import Any

from django.core.management.base import CommandParser

from labplan.base.commands import LabCommand
from labplan.base.outbox import deliver_waiting


class Command(LabCommand):
    help = "Run the work that waits in the outbox, here and one after the other."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--once", action="store_true", help="stop when nothing is due")
        parser.add_argument("--pause", type=float, default=0.2, help="seconds between looks")

    def handle(self, *args: Any, **options: Any) -> None:
        pause = threading.Event()
        if not options["once"]:
            self.stdout.write("Delivering what waits in the outbox, until Ctrl-C.")
        while True:
            if deliver_waiting():
                continue
            if options["once"]:
                return
            pause.wait(options["pause"])
