"""What the commands of this app share: a bar, and refusals in plain words."""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager

from django.core.management.base import CommandError
from django.db import DatabaseError
from rich.console import Console
from rich.progress import Progress

from labplan.base.errors import DomainError
from labplan.base.problems import has_no_tables
from labplan.operations.files import Progress as Report


@contextmanager
def shown_progress(text: str) -> Iterator[Report]:
    """A bar on the terminal's error side; nothing where that is no terminal."""
    console = Console(stderr=True)
    with Progress(console=console, transient=True, disable=not console.is_terminal) as bar:
        task = bar.add_task(text, total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)


@contextmanager
def refusals_told() -> Iterator[None]:
    """End the command with the words of a refusal, without a traceback."""
    try:
        yield
    except DomainError as error:
        raise CommandError(error.detail) from error
    except (DatabaseError, sqlite3.Error) as error:
        if has_no_tables(error):
            raise
        raise CommandError(f"The database refused: {str(error).strip()}") from error
    except OSError as error:
        raise CommandError(f"{error.filename}: {error.strerror}.") from error
