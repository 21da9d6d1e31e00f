from django.apps import AppConfig
from django.db.models.signals import post_migrate


class BaseConfig(AppConfig):
    name = "labplan.base"
    label = "base"

    def ready(self) -> None:
        from labplan.base import append_only, sweeps  # noqa: F401 - registers the sweeps
        from labplan.base.models import Event
        from labplan.base.seal import Book, register_book
        from labplan.base.seal_tables import seal_triggers

        register_book(Book("events", Event, row_word="event"))
        append_only.register_triggers(seal_triggers)

        # The one signal in the house: SQLite drops triggers when a migration rebuilds a table.
        post_migrate.connect(append_only.install_all, dispatch_uid="append_only")
