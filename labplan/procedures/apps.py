from django.apps import AppConfig


class ProceduresConfig(AppConfig):
    name = "labplan.procedures"
    label = "procedures"

    def ready(self) -> None:
        from labplan.base.seal import Book, register_book
        from labplan.procedures import tasks  # noqa: F401 - registers the outbox handlers
        from labplan.procedures.models import Document

        register_book(Book("documents", Document, row_word="document", seal_named="seal"))
