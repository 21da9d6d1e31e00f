"""What labplan's commands share: a database that is not there is said in one sentence."""

import re
from typing import Any

from django.core.management.base import BaseCommand, CommandError
from django.db import OperationalError, ProgrammingError

from labplan.base.problems import has_no_tables


class LabCommand(BaseCommand):
    """A command that works on the database."""

    def execute(self, *args: Any, **options: Any) -> Any:
        try:
            return super().execute(*args, **options)
        except (OperationalError, ProgrammingError) as error:
            if has_no_tables(error):
                raise CommandError(
                    "The database has no tables yet: run 'manage.py migrate' first."
                ) from error
            if isinstance(error, ProgrammingError):
                raise
            raise CommandError(
                f"The database does not do it: {error}\nIs it running, is there room on its disk, "
                "does DATABASE_URL (or LABPLAN_DATA_DIR) name the right one?"
            ) from error


def checked_code(code: str) -> str:
    """A code as it stands in every record: 1 to 24 letters, digits, dashes or underscores."""
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_-]{0,23}", code):
        raise CommandError(
            f"{code!r} is no code: 1 to 24 letters, digits, dashes or underscores, please."
        )
    return code


def checked_text(text: str, longest: int) -> str:
    """A name or a title: not empty, not too long, no control characters."""
    if not text.strip() or len(text) > longest or not text.isprintable():
        raise CommandError(f"Give 1 to {longest} printable characters, not {text[:40]!r}.")
    return text
