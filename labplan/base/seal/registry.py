"""Which tables are sealed. `base` knows the event log; each app registers its own."""

from dataclasses import dataclass

from django.db import models


@dataclass(frozen=True)
class Book:
    """An append-only table whose rows are sealed in the order of their numbers.

    With a `subject` (a foreign key) each subject is a book of its own, and `number` counts its
    rows from 1 without gaps. Without one the whole table is one book, numbered by `id`.
    """

    name: str
    model: type[models.Model]
    subject: str | None = None
    number: str = "id"
    row_word: str = "row"  # as in "line 7"
    subject_code: str = "code"  # field of the subject by which people know it
    seal_named: str | None = None  # field that names the newest seal of its time, or ""

    @property
    def subject_model(self) -> type[models.Model]:
        assert self.subject is not None
        found = self.model._meta.get_field(self.subject).related_model
        assert isinstance(found, type)
        return found


_books: dict[str, Book] = {}


def register_book(book: Book) -> None:
    """Have the rows of a table sealed from now on; safe to repeat."""
    if _books.setdefault(book.name, book) != book:
        raise ValueError(f"two books are called {book.name}")


def books() -> list[Book]:
    return [_books[name] for name in sorted(_books)]


def get_book(name: str) -> Book:
    return _books[name]
