"""Look at the outbox, hold it, and send dead letters again."""

from typing import Any

from django.core.management.base import CommandError, CommandParser

from labplan.base import outbox
from labplan.base.commands import LabCommand, checked_text
from labplan.base.errors import DomainError


class Command(LabCommand):
    help = "The outbox: status, dead letters, send them again, pause, resume."

    def add_arguments(self, parser: CommandParser) -> None:
        verbs = parser.add_subparsers(dest="verb", required=True, metavar="VERB")
        verbs.add_parser("status", help="what waits, and for how long")
        verbs.add_parser("dead", help="list the messages that were given up, with their last error")
        again = verbs.add_parser("send-again", help="give dead letters a fresh start")
        again.add_argument("numbers", nargs="*", type=int, metavar="NUMBER")
        again.add_argument("--all", action="store_true", help="all of them")
        hold = verbs.add_parser("pause", help="send nothing until resumed; what runs, runs on")
        hold.add_argument("--reason", default="paused by the operator")
        verbs.add_parser("resume", help="send again")

    def handle(self, *args: Any, **options: Any) -> None:
        verb = options["verb"].replace("-", "_")
        getattr(self, f"_{verb}")(options)

    def _status(self, options: dict[str, Any]) -> None:
        figures = outbox.outbox_figures()
        for (queue, state), number in sorted(figures.waiting.items()):
            self.stdout.write(f"{queue:<13} {state:<5} {number:>6}")
        self.stdout.write(f"oldest unfinished: {figures.oldest_age_s:.0f} s")
        held = outbox.find_pause()
        if held:
            self.stdout.write(f"PAUSED since {held.since:%Y-%m-%d %H:%M} UTC: {held.reason}")

    def _dead(self, options: dict[str, Any]) -> None:
        rows = list(outbox.list_dead())
        for row in rows:
            self.stdout.write(
                f"{row.pk}  {row.topic} {row.payload}  {row.created_at:%Y-%m-%d %H:%M} UTC, "
                f"{row.attempts} runs\n    {row.last_error}"
            )
        if not rows:
            self.stdout.write("No dead letters.")

    def _send_again(self, options: dict[str, Any]) -> None:
        numbers = options["numbers"]
        if options["all"]:
            numbers = list(outbox.list_dead().values_list("pk", flat=True))
            if not numbers:
                self.stdout.write("No dead letters.")
        elif not numbers:
            raise CommandError("Name the messages by their numbers, or give --all.")
        for number in numbers:
            try:
                sent = outbox.send_again(number)
            except DomainError as error:
                raise CommandError(f"Message {number}: {error.detail}") from error
            if not sent:
                raise CommandError(f"Message {number} is no dead letter.")
            self.stdout.write(f"{number} is sent again.")

    def _pause(self, options: dict[str, Any]) -> None:
        outbox.pause(checked_text(options["reason"], 160))
        self.stdout.write("Paused: nothing is sent until 'manage.py outbox resume'.")

    def _resume(self, options: dict[str, Any]) -> None:
        was_paused = outbox.resume()
        self.stdout.write("Sending again." if was_paused else "It was not paused.")
