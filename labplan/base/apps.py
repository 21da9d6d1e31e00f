from django.apps import AppConfig
from django.db.models.signals import post_migrate


class BaseConfig(AppConfig):
    name = "labplan.base"
    label = "base"

    def ready(self) -> None:
        from labplan.base import append_only, sweeps  # noqa: F401 - registers the sweeps

        # The one signal in the house: SQLite drops triggers when a migration rebuilds a table.
        post_migrate.connect(append_only.install_all, dispatch_uid="append_only")
